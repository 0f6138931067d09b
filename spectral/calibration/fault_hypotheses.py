"""What might explain an exposure that contradicts the others, each fitted."""

from __future__ import annotations

import enum
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.calibration.residual import ResidualCorrection
    from spectral.calibration.result import Calibration
    from spectral.calibration.seen_exposure import SeenExposure

LEAST_ERROR = 1e-3
"""Relative error of a mean bin that the smooth correction may leave unseen."""
ROUNDS = 12
STEP_SHARE = 1e-3
STEP_KEV = 0.02
STEP_OUTPUT = 1e-3
LARGEST_KEV = 5.0
LARGEST_LOG_OUTPUT = 4.0


class FaultKind(enum.Enum):
    """What would explain an exposure."""

    OUTPUT = "current"
    TIME = "count time"
    THICKNESS = "thickness"
    STACK = "stack"
    ANOTHER = "another step's stack"
    SWAPPED = "swapped"
    THRESHOLD = "thresholds"
    IMAGE = "stored image"
    UNKNOWN = "unexplained"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Hypothesis:
    """An explanation of one exposure, fitted to its counts.

    Attributes
    ----------
    kind : FaultKind
    areal, areal_error : arrays, shape (material,), in g/cm2
        What stood in the beam; error 0 where it was not fitted.
    shift_kev, shift_error : float
        Common shift of the thresholds.
    output, output_error : float
        Factor on the tube's current, or on the count time.
    chi_square : float
    size : int
        Fitted parameters.
    like : tuple of int
        Exposures that had this very stack by the scan's list.
    """

    kind: FaultKind
    areal: NDArray[np.float64]
    areal_error: NDArray[np.float64]
    chi_square: float
    size: int
    shift_kev: float = 0.0
    shift_error: float = 0.0
    output: float = 1.0
    output_error: float = 0.0
    like: tuple[int, ...] = ()


def spread(smooth: ResidualCorrection, one: SeenExposure) -> NDArray[np.float64]:
    """Covariance of an exposure's departure from the prediction, (bin, bin)."""
    terms = smooth.terms(one.areal_density[None], one.current_ma)[0]
    predicted = np.einsum("i,bij,j->b", terms, smooth.covariance, terms)
    own = one.error**2 + predicted + LEAST_ERROR**2
    drift = max(smooth.drift_spread, LEAST_ERROR) ** 2
    return np.asarray(np.diag(own) + drift)


def departure(smooth: ResidualCorrection, one: SeenExposure) -> NDArray[np.float64]:
    """Departure of an exposure from the prediction, shape (bin,)."""
    wanted = smooth.log_factor(one.areal_density[None], one.current_ma)[0]
    return np.asarray(one.total - wanted)


def distance(smooth: ResidualCorrection, one: SeenExposure) -> float:
    """Squared distance of an exposure from the prediction."""
    away = departure(smooth, one)
    return float(away @ np.linalg.solve(spread(smooth, one), away))


def hypotheses(
    calibration: Calibration,
    smooth: ResidualCorrection,
    one: SeenExposure,
    listed: dict[int, NDArray[np.float64]],
) -> list[Hypothesis]:
    """Explanations of an exposure: output, thresholds, layers, stacks of the list.

    Parameters
    ----------
    calibration : Calibration
    smooth : ResidualCorrection
        Fitted without this exposure.
    one : SeenExposure
    listed : dict of int to array, shape (material,), in g/cm2
        Stack of each exposure by the scan's list.
    """
    trial = _Trials(calibration, smooth, one)
    size = one.areal_density.size
    found = [
        trial.fitted(FaultKind.OUTPUT, (size + 1,)),
        trial.fitted(FaultKind.TIME, (size + 2,)),
        trial.fitted(FaultKind.THRESHOLD, (size,)),
    ]
    found += [trial.fitted(FaultKind.THICKNESS, (m,)) for m in range(size)]
    if size > 1:
        found.append(trial.stack())
    stacks = {tuple(areal.tolist()): areal for areal in listed.values()}
    stacks.pop(tuple(one.areal_density.tolist()), None)
    for areal in stacks.values():
        like = tuple(e for e, other in listed.items() if np.array_equal(other, areal))
        found.append(replace(trial.at_stack(areal), like=like))
    return found


@dataclass(slots=True, eq=False)
class _Trials:
    """Fits to the counts of one exposure.

    The point is (areal density of each material, threshold shift, ln current,
    ln count time).
    """

    calibration: Calibration
    smooth: ResidualCorrection
    one: SeenExposure
    start: NDArray[np.float64] = field(init=False)
    seen: NDArray[np.float64] = field(init=False)

    def __post_init__(self) -> None:
        self.start = np.concatenate([self.one.areal_density, np.zeros(3)])
        away = departure(self.smooth, self.one)
        self.seen = self.log_counts(self.start[None])[0] + away

    def log_counts(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """Logarithm of the average pixel's counts per second, (point, bin)."""
        made = self.calibration
        areal, (shift, current, seconds) = points[:, :-3], points[:, -3:].T
        now = self.one.current_ma * np.exp(current)
        tables = curve_tables(made.model, areal, made.photons_per_mas * now)
        result = np.empty((len(points), made.levels_kev.size))
        average = PixelDepartures(values=np.zeros((1, made.levels_kev.size + 3)))
        for moved in np.unique(shift):
            here = shift == moved
            above, _ = expected_above(tables, made.levels_kev + moved, average)
            result[here] = counts_to_bins(above[0][here])
        logs = np.log(np.maximum(result, 1e-12)) + seconds[:, None]
        return np.asarray(logs + self.smooth.log_factor(areal, now))

    def fitted(
        self,
        kind: FaultKind,
        free: Sequence[int],
        start: NDArray[np.float64] | None = None,
    ) -> Hypothesis:
        """The point that fits best with some of its entries free.

        Notes
        -----
        Gauss-Newton steps, no layer below zero.
        """
        point = (self.start if start is None else start).copy()
        chosen = list(free)
        size = self.one.areal_density.size
        largest = self.calibration.largest
        step = np.concatenate([STEP_SHARE * largest, [STEP_KEV], [STEP_OUTPUT] * 2])
        most = np.array([LARGEST_KEV, LARGEST_LOG_OUTPUT, LARGEST_LOG_OUTPUT])
        top = np.concatenate([2.0 * largest, most])
        bottom = np.concatenate([np.zeros(size), -most])
        unit = np.eye(point.size)
        weight = np.linalg.inv(self.spread(point))
        covariance = np.eye(len(chosen))
        for _ in range(ROUNDS):
            moved = np.array([point + step[i] * unit[i] for i in chosen])
            logs = self.log_counts(np.vstack([point, moved]))
            slope = (logs[1:] - logs[0]).T / step[chosen]
            covariance = np.linalg.pinv(slope.T @ weight @ slope)
            change = covariance @ slope.T @ weight @ (self.seen - logs[0])
            bound = 0.25 * (top - bottom)[chosen]
            before = point.copy()
            point[chosen] += np.clip(change, -bound, bound)
            point = np.clip(point, bottom, top)
            weight = np.linalg.inv(self.spread(point))
            if np.all(np.abs(point - before) < 1e-2 * step):
                break
        error = np.zeros(point.size)
        error[chosen] = np.sqrt(np.diag(covariance))
        return self.hypothesis(kind, point, error, len(chosen))

    def stack(self) -> Hypothesis:
        """All layers free; those that would be negative are absent."""
        size = self.one.areal_density.size
        found = self.fitted(FaultKind.STACK, range(size))
        absent = found.areal <= 0.0
        if not absent.any() or absent.all():
            return found
        start = self.start.copy()
        start[:size] = found.areal
        again = self.fitted(FaultKind.STACK, np.flatnonzero(~absent).tolist(), start)
        return replace(again, size=size)

    def at_stack(self, areal: NDArray[np.float64]) -> Hypothesis:
        """A given stack, nothing fitted."""
        point = np.concatenate([areal, np.zeros(3)])
        return self.hypothesis(FaultKind.ANOTHER, point, np.zeros(point.size), 0)

    def spread(self, point: NDArray[np.float64]) -> NDArray[np.float64]:
        """Covariance of the departure, were the stack that of a point."""
        return spread(self.smooth, replace(self.one, areal_density=point[:-3]))

    def hypothesis(
        self,
        kind: FaultKind,
        point: NDArray[np.float64],
        error: NDArray[np.float64],
        size: int,
    ) -> Hypothesis:
        """A point with its chi-square."""
        left = self.seen - self.log_counts(point[None])[0]
        output = float(np.exp(point[-2] + point[-1]))
        return Hypothesis(
            kind=kind,
            areal=point[:-3],
            areal_error=error[:-3],
            shift_kev=float(point[-3]),
            shift_error=float(error[-3]),
            output=output,
            output_error=output * float(error[-2] + error[-1]),
            chi_square=float(left @ np.linalg.solve(self.spread(point), left)),
            size=size,
        )
