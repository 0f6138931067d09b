"""Exposures of a wedge scan that contradict what the scan says of them."""

from __future__ import annotations

import enum
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from spectral.calibration.residual import refit_residual
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
    from spectral.scans.scan import Scan

FALSE_ALARM = 1e-6
"""Probability that a sound exposure is called faulty, per exposure."""
LEAST_ERROR = 1e-3
"""Relative error of a mean bin that the smooth correction may leave unseen."""
LARGEST_SHARE = 0.34
"""No more than this share of the exposures can be told from the sound ones."""
AS_GOOD = 25.0
"""Explanations whose chi-square differs by less are both named."""
SIMPLER_BY = 6.0
"""A hypothesis with one more parameter must lower chi-square by this much."""


class FaultKind(enum.Enum):
    """What would explain an exposure."""

    OUTPUT = "tube output"
    THICKNESS = "thickness"
    STACK = "stack"
    SWAPPED = "swapped"
    THRESHOLD = "thresholds"
    UNKNOWN = "unexplained"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepFault:
    """One faulty exposure.

    Attributes
    ----------
    exposure : int
        Index in the scan.
    kind : FaultKind
    text : str
        What is wrong and what value would fit, one sentence.
    fitting : array, shape (material,), in g/cm2
        Areal density that fits the counts best.
    output : float
        Factor on the tube's output (current times time) that fits best.
    chi_square : float
        Departure from what the other exposures predict.
    """

    exposure: int
    kind: FaultKind
    text: str
    fitting: NDArray[np.float64]
    output: float
    chi_square: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SeenExposure:
    """One exposure as the average pixel saw it.

    Attributes
    ----------
    exposure : int
    areal_density : array, shape (material,), in g/cm2
        What the scan says.
    current_ma : float
    total : array, shape (bin,)
        Logarithm of mean counts over those of the average pixel without the smooth
        correction, at the output that the scan says.
    error : array, shape (bin,)
        Statistical standard deviation of that.
    """

    exposure: int
    areal_density: NDArray[np.float64]
    current_ma: float
    total: NDArray[np.float64]
    error: NDArray[np.float64]


def find_step_faults(calibration: Calibration) -> tuple[StepFault, ...]:
    """Exposures that the calibration's other exposures contradict.

    Parameters
    ----------
    calibration : Calibration
        May be spoilt by the very faults: the smooth correction is fitted anew to the
        exposures that agree.

    Returns
    -------
    tuple of StepFault, in the order of the scan

    Notes
    -----
    One exposure after the other leaves, the worst first, as long as a left-out
    exposure departs from the prediction of the rest by more than chi-square allows
    (robustly scaled); then those that left are compared with the final prediction.
    """
    steps = calibration.steps
    total = np.log1p(steps.physics_residual) + steps.drift[:, None]
    count = total.shape[0]
    kept = np.ones(count, bool)
    limit = float(chi2.isf(FALSE_ALARM, total.shape[1]))
    seen = [
        SeenExposure(
            exposure=int(steps.exposure[e]),
            areal_density=steps.areal_density[e],
            current_ma=float(steps.current_ma[e]),
            total=total[e],
            error=steps.error[e],
        )
        for e in range(count)
    ]
    for _ in range(int(LARGEST_SHARE * count)):
        distance = np.zeros(count)
        for e in np.flatnonzero(kept):
            smooth = _smooth_without(calibration, total, kept, int(e))
            distance[e] = _distance(smooth, seen[e])
        usual = float(np.median(distance[kept])) / chi2.median(total.shape[1])
        distance /= max(usual, 1.0)
        worst = int(np.argmax(distance))
        if distance[worst] < limit:
            break
        kept[worst] = False
    faults = []
    for e in np.flatnonzero(~kept):
        smooth = _smooth_without(calibration, total, kept, int(e))
        faults.append(_named(calibration, smooth, seen[e]))
    return _with_swaps(calibration, [f for f in faults if f is not None], seen)


def name_faults(
    calibration: Calibration, seen: list[SeenExposure]
) -> tuple[StepFault, ...]:
    """Faults of exposures that the calibration did not use; none for sound ones."""
    faults = [_named(calibration, calibration.residual, one) for one in seen]
    return _with_swaps(calibration, [f for f in faults if f is not None], seen)


def look_at(
    calibration: Calibration, scan: Scan, exposures: Sequence[int]
) -> list[SeenExposure]:
    """Exposures of a scan as the average pixel saw them, through all good pixels."""
    flat = np.flatnonzero(calibration.good.ravel())
    current = (
        np.full(scan.shape[0], calibration.residual.reference_current_ma)
        if scan.current_ma is None
        else scan.current_ma
    )
    found = []
    for e in exposures:
        counts = scan.counts.read([int(e)])[0].reshape(scan.shape[1], -1)[:, flat]
        measured = counts_to_bins(counts.astype(np.float64), axis=0).sum(axis=1)
        areal = np.nan_to_num(scan.areal_density[e])
        rate = calibration.expected_bins(
            areal[None], current[e : e + 1], np.ones(1), flat
        )
        expected = np.maximum(rate.sum(axis=(0, 1)) * scan.count_time_s[e], 1e-9)
        smooth = calibration.residual.log_factor(areal[None], current[e])[0]
        measured = np.maximum(measured, 0.5)
        found.append(
            SeenExposure(
                exposure=int(e),
                areal_density=areal,
                current_ma=float(current[e]),
                total=np.log(measured / expected) + smooth,
                error=1.0 / np.sqrt(measured),
            )
        )
    return found


def _smooth_without(
    calibration: Calibration,
    total: NDArray[np.float64],
    kept: NDArray[np.bool_],
    step: int,
) -> ResidualCorrection:
    steps = calibration.steps
    others = kept.copy()
    others[step] = False
    return refit_residual(
        calibration.residual,
        total[others],
        steps.error[others],
        steps.areal_density[others],
        steps.current_ma[others],
    )


def _spread(smooth: ResidualCorrection, one: SeenExposure) -> NDArray[np.float64]:
    """Covariance of an exposure's departure from the prediction, (bin, bin)."""
    terms = smooth.terms(one.areal_density[None], one.current_ma)[0]
    predicted = np.einsum("i,bij,j->b", terms, smooth.covariance, terms)
    own = one.error**2 + predicted + LEAST_ERROR**2
    drift = max(smooth.drift_spread, LEAST_ERROR) ** 2
    return np.asarray(np.diag(own) + drift)


def _away(smooth: ResidualCorrection, one: SeenExposure) -> NDArray[np.float64]:
    """Departure of an exposure from the prediction, shape (bin,)."""
    wanted = smooth.log_factor(one.areal_density[None], one.current_ma)[0]
    return np.asarray(one.total - wanted)


def _distance(smooth: ResidualCorrection, one: SeenExposure) -> float:
    """Squared distance of an exposure from the prediction."""
    away = _away(smooth, one)
    return float(away @ np.linalg.solve(_spread(smooth, one), away))


def _log_counts(
    calibration: Calibration,
    smooth: ResidualCorrection,
    areal: NDArray[np.float64],
    current: float,
) -> NDArray[np.float64]:
    """Logarithm of the average pixel's bin counts behind stacks, (case, bin)."""
    tables = curve_tables(
        calibration.model, areal, calibration.photons_per_mas * current
    )
    average = PixelDepartures(values=np.zeros((1, calibration.levels_kev.size + 3)))
    above, _ = expected_above(tables, calibration.levels_kev, average)
    bins = np.maximum(counts_to_bins(above[0]), 1e-12)
    return np.asarray(np.log(bins) + smooth.log_factor(areal, current))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Trial:
    """A hypothesis, fitted."""

    kind: FaultKind
    material: int
    areal: NDArray[np.float64]
    error: NDArray[np.float64]
    output: float
    chi_square: float
    size: int


def _named(
    calibration: Calibration, smooth: ResidualCorrection, one: SeenExposure
) -> StepFault | None:
    """The simplest explanation of an exposure; None if it needs none after all."""
    spread = _spread(smooth, one)
    areal = one.areal_density
    away = _away(smooth, one)
    at_rest = float(away @ np.linalg.solve(spread, away))
    if at_rest < chi2.isf(FALSE_ALARM, away.size):
        return None
    size = areal.size
    seen = _log_counts(calibration, smooth, areal[None], one.current_ma)[0] + away
    trials = [_output_trial(away, spread, areal)]
    every = [[m] for m in range(size)] + ([list(range(size))] if size > 1 else [])
    trials.extend(
        _stack_trial(calibration, smooth, seen, spread, one, free) for free in every
    )
    best = min(trials, key=lambda t: t.chi_square + SIMPLER_BY * t.size)
    unexplained = best.chi_square > 10.0 * chi2.isf(FALSE_ALARM, away.size)
    kind = FaultKind.UNKNOWN if unexplained else best.kind
    return StepFault(
        exposure=one.exposure,
        kind=kind,
        text=_sentence(calibration, one, best, kind)
        + _or_else(calibration, trials, best),
        fitting=best.areal,
        output=best.output,
        chi_square=at_rest,
    )


def _output_trial(
    away: NDArray[np.float64], spread: NDArray[np.float64], areal: NDArray[np.float64]
) -> _Trial:
    # the prior of the drift is lifted: a common factor of any size
    own = spread - spread[0, 1] if away.size > 1 else spread
    weight = np.linalg.inv(own)
    ones = np.ones(away.size)
    factor = float(ones @ weight @ away / (ones @ weight @ ones))
    left = away - factor
    return _Trial(
        kind=FaultKind.OUTPUT,
        material=-1,
        areal=areal,
        error=np.zeros(areal.size),
        output=float(np.exp(factor)),
        chi_square=float(left @ weight @ left),
        size=1,
    )


def _stack_trial(
    calibration: Calibration,
    smooth: ResidualCorrection,
    seen: NDArray[np.float64],
    spread: NDArray[np.float64],
    one: SeenExposure,
    free: list[int],
) -> _Trial:
    """Areal densities of some materials that fit the counts best."""
    weight = np.linalg.inv(spread)
    areal = one.areal_density.copy()
    largest = calibration.largest
    small = 1e-3 * largest
    covariance = np.eye(len(free))
    for _ in range(12):
        moved = np.array([areal + small * (np.arange(areal.size) == m) for m in free])
        logs = _log_counts(
            calibration, smooth, np.vstack([areal, moved]), one.current_ma
        )
        slope = (logs[1:] - logs[0]).T / small[free]
        covariance = np.linalg.inv(slope.T @ weight @ slope)
        change = covariance @ slope.T @ weight @ (seen - logs[0])
        areal[free] += np.clip(change, -0.5 * largest[free], 0.5 * largest[free])
        areal = np.clip(areal, -0.1 * largest, 2.0 * largest)
        if np.all(np.abs(change) < 1e-5 * largest[free]):
            break
    left = seen - _log_counts(calibration, smooth, areal[None], one.current_ma)[0]
    error = np.zeros(areal.size)
    error[free] = np.sqrt(np.diag(covariance))
    return _Trial(
        kind=FaultKind.THICKNESS if len(free) == 1 else FaultKind.STACK,
        material=free[0] if len(free) == 1 else -1,
        areal=areal,
        error=error,
        output=1.0,
        chi_square=float(left @ weight @ left),
        size=len(free),
    )


def _stack_words(calibration: Calibration, areal: NDArray[np.float64]) -> str:
    parts = [
        f"{10.0 * a / m.density_g_cm3:.3g} mm {m.name}"
        for m, a in zip(calibration.materials, areal, strict=True)
    ]
    return " + ".join(parts)


def _sentence(
    calibration: Calibration, one: SeenExposure, best: _Trial, kind: FaultKind
) -> str:
    said = _stack_words(calibration, one.areal_density)
    if not one.areal_density.any():
        said = "an open beam"
    start = f"exposure {one.exposure}: the scan says {said}"
    if kind is FaultKind.UNKNOWN:
        return f"{start}; no stack and no tube output explains its counts"
    if kind is FaultKind.OUTPUT:
        charge = one.current_ma
        return (
            f"{start} at {charge:g} mA; the counts fit {100 * best.output:.1f} % of "
            f"that output ({best.output * charge:.3g} mA, or as much in time)"
        )
    if kind is FaultKind.THICKNESS:
        layer = calibration.materials[best.material]
        scale = 10.0 / layer.density_g_cm3
        return (
            f"{start}; the counts fit {scale * best.areal[best.material]:.3f} +- "
            f"{scale * best.error[best.material]:.3f} mm {layer.name}"
        )
    return f"{start}; the counts fit {_stack_words(calibration, best.areal)}"


def _or_else(calibration: Calibration, trials: list[_Trial], best: _Trial) -> str:
    """Another explanation of the same size that fits nearly as well."""
    for other in sorted(trials, key=lambda t: t.chi_square):
        near = other.chi_square < best.chi_square + AS_GOOD
        if other is best or other.size != best.size or not near:
            continue
        if other.kind is FaultKind.OUTPUT:
            return f" (or {100 * other.output:.1f} % of the tube's output)"
        return f" (or {_stack_words(calibration, other.areal)})"
    return ""


def _with_swaps(
    calibration: Calibration, faults: list[StepFault], seen: list[SeenExposure]
) -> tuple[StepFault, ...]:
    """Pairs whose fitting stacks are each other's become swaps."""
    said = {one.exposure: one.areal_density for one in seen}
    near = 0.03 * calibration.largest

    def crossed(a: StepFault, b: StepFault) -> bool:
        there = np.abs(a.fitting - said[b.exposure]) < near
        back = np.abs(b.fitting - said[a.exposure]) < near
        return bool(there.all() and back.all())

    result = []
    for fault in faults:
        partner = next(
            (o for o in faults if o is not fault and crossed(fault, o)), None
        )
        if partner is None:
            result.append(fault)
            continue
        words = _stack_words(calibration, said[partner.exposure])
        text = (
            f"exposure {fault.exposure}: swapped with exposure {partner.exposure}; the "
            f"counts fit that one's {words}"
        )
        result.append(replace(fault, kind=FaultKind.SWAPPED, text=text))
    return tuple(sorted(result, key=lambda f: f.exposure))
