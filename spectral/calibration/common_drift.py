"""What all pixels did together since a calibration: tube output and thresholds."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import linalg, stats

from spectral.calibration.pooled_counts import log_covariance, pooled
from spectral.errors import ScanError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.calibration.wedge_data import WedgeData

SHIFT_PRIOR_KEV = 1.0
NOISE_PRIOR_KEV2 = 0.2
DEAD_TIME_PRIOR = 0.02
"""How far thresholds, noise variance and ln dead time may drift between scans, as
standard deviations (common practice, no source)."""
MOST_OUTPUT = 100.0
"""Times the calibration's output, or below its inverse, is no drift of a tube."""
LARGEST_SHIFT_KEV = 3.0
ROUNDS = 12
AT_REST = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CommonDrift:
    """Movement of the average pixel, from the counts of all pixels together.

    Attributes
    ----------
    output, output_error : arrays, shape (exposure,)
        Tube output over the calibration's, and its standard deviation.
    shift_kev, shift_error_kev : arrays, shape (threshold,), in keV
        Common shift of each threshold.
    shift_covariance : array, shape (threshold, threshold), in keV2
        A shift that all share is nearly one of the output: their errors go together.
    variance_kev2, variance_error_kev2 : float, in keV2
        Change of the noise variance.
    ln_dead_time, ln_dead_time_error : float
        Change of ln dead time.
    residual, residual_error : arrays, shape (exposure, bin)
        Logarithm of counts over expected counts that remains, and the standard
        deviation that the counts and the calibration's own errors give it.
    before : array, shape (exposure, bin)
        The same logarithm if nothing but the tube's output had moved.
    chi_square : float
        Of the residuals, correlations and priors taken into account.
    freedom : int
    """

    output: NDArray[np.float64]
    output_error: NDArray[np.float64]
    shift_kev: NDArray[np.float64]
    shift_error_kev: NDArray[np.float64]
    shift_covariance: NDArray[np.float64]
    variance_kev2: float
    variance_error_kev2: float
    ln_dead_time: float
    ln_dead_time_error: float
    residual: NDArray[np.float64]
    residual_error: NDArray[np.float64]
    before: NDArray[np.float64]
    chi_square: float
    freedom: int

    @property
    def chance(self) -> float:
        """Probability of residuals at least so large if the calibration holds."""
        return float(stats.chi2.sf(self.chi_square, self.freedom))

    @property
    def shift_chance(self) -> float:
        """Probability of shifts at least so large if no threshold moved."""
        return chance_of_shift(self.shift_kev, self.shift_covariance)


def chance_of_shift(
    shift_kev: NDArray[np.float64], covariance: NDArray[np.float64]
) -> float:
    """Probability of shifts at least so large if no threshold moved (chi-square)."""
    square = float(shift_kev @ np.linalg.solve(covariance, shift_kev))
    return float(stats.chi2.sf(square, shift_kev.size))


def moved(calibration: Calibration, drift: CommonDrift) -> Calibration:
    """The calibration with its average pixel moved; the tube's output stays."""
    return _moved(calibration, drift.shift_kev, drift.variance_kev2, drift.ln_dead_time)


def common_drift(
    calibration: Calibration,
    data: WedgeData,
    *,
    shift_prior_kev: float = SHIFT_PRIOR_KEV,
) -> CommonDrift:
    """Tube output, threshold shifts, noise and dead time that meet the pooled counts.

    Parameters
    ----------
    calibration : Calibration
    data : WedgeData
        Of pixels that the calibration knows.
    shift_prior_kev : float, in keV
        How far a threshold may have moved, as a standard deviation.

    Returns
    -------
    CommonDrift

    Raises
    ------
    ScanError
        If an exposure holds no counts in a bin or absurdly many, or no small movement
        meets the counts.

    Notes
    -----
    Generalised least squares on the logarithm of each bin's counts, summed over the
    pixels, with normal priors on all but the output. The covariance holds counting
    statistics, the errors of the smooth correction, and what the correction left of
    the calibration's own exposures; the last is taken as common to exposures of one
    stack. Source: A. C. Aitken, Proc. R. Soc. Edinburgh 55 (1935) 42.
    """
    counts = data.bins.sum(axis=0)
    _refuse_empty(data, counts)
    return met_by(
        calibration,
        data,
        counts,
        log_covariance(calibration, data, counts),
        shift_prior_kev=shift_prior_kev,
    )


def _refuse_empty(data: WedgeData, counts: NDArray[np.float64]) -> None:
    empty = np.argwhere(~(counts > 0.0))
    if len(empty):
        e, b = empty[0]
        msg = f"exposure {data.exposure[e]} holds no counts in bin {b + 1} of any pixel"
        raise ScanError(msg)


def met_by(
    calibration: Calibration,
    data: WedgeData,
    counts: NDArray[np.float64],
    covariance: NDArray[np.float64],
    *,
    shift_prior_kev: float = SHIFT_PRIOR_KEV,
) -> CommonDrift:
    """The drift that meets given pooled counts, as `common_drift`.

    Parameters
    ----------
    calibration : Calibration
    data : WedgeData
        Says what was exposed and which pixels; its counts are not looked at.
    counts : array, shape (exposure, bin)
    covariance : array, shape (bin, exposure, exposure)
        Of their logarithm.
    shift_prior_kev : float, in keV
    """
    _refuse_empty(data, counts)
    problem = _Problem(calibration, data, np.log(counts), covariance, shift_prior_kev)
    first, _ = problem.at(np.zeros(problem.unknowns))
    nothing = np.zeros(problem.unknowns)
    times = counts.sum(axis=1) / first.sum(axis=1)
    # of expected counts that are no number neither holds
    absurd = ~((times <= MOST_OUTPUT) & (times >= 1.0 / MOST_OUTPUT))
    if absurd.any():
        e = int(np.argmax(absurd))
        msg = (
            f"exposure {data.exposure[e]} counts {times[e]:.3g} times what the "
            "calibration leads to expect; are its counts, current and count time right?"
        )
        raise ScanError(msg)
    nothing[: counts.shape[0]] = np.log(times)
    values, information, before = nothing, np.eye(1), np.zeros_like(counts)
    for turn in range(ROUNDS):
        expected, slope = problem.at(values)
        left = problem.observed - np.log(expected)
        if turn == 0:
            before = left - np.average(left, axis=1, weights=counts)[:, None]
        step, information = problem.step(values, left, slope)
        values = values + step
        # a step that is no number is no small movement either
        if not np.abs(values[problem.shifts]).max() <= LARGEST_SHIFT_KEV:
            msg = (
                f"thresholds moved by more than {LARGEST_SHIFT_KEV:g} keV would be "
                "needed to meet the counts; check the scan, or take a full wedge scan"
            )
            raise ScanError(msg)
        deviation = np.sqrt(np.diag(np.linalg.inv(information)))
        if np.abs(step / deviation).max() < AT_REST:
            break
    expected, _ = problem.at(values)
    return problem.result(
        values, information, problem.observed - np.log(expected), before
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Problem:
    """Pooled bins of a scan, and their prediction by a moved calibration."""

    calibration: Calibration
    data: WedgeData
    observed: NDArray[np.float64]
    covariance: NDArray[np.float64]
    shift_prior_kev: float

    @property
    def exposures(self) -> int:
        return int(self.observed.shape[0])

    @property
    def unknowns(self) -> int:
        return int(self.exposures + self.observed.shape[1] + 2)

    @property
    def shifts(self) -> slice:
        return slice(self.exposures, self.unknowns - 2)

    def at(
        self, values: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Expected pooled bins, and change of their logarithm with each unknown."""
        now = _moved(
            self.calibration, values[self.shifts], float(values[-2]), float(values[-1])
        )
        total, change = pooled(now, self.data, np.exp(values[: self.exposures]))
        relative = change / total[..., None]
        n, bins = total.shape
        slope = np.zeros((n, bins, self.unknowns))
        slope[np.arange(n), :, np.arange(n)] = relative[..., 0]
        slope[..., n:] = relative[..., 1:]
        return total, slope

    def step(
        self,
        values: NDArray[np.float64],
        left: NDArray[np.float64],
        slope: NDArray[np.float64],
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Gauss-Newton step and information."""
        weight = self._prior()
        information = np.diag(weight)
        score = -weight * values
        for b in range(left.shape[1]):
            solved = linalg.solve(self.covariance[b], slope[:, b], assume_a="pos")
            information += slope[:, b].T @ solved
            score += solved.T @ left[:, b]
        return np.asarray(np.linalg.solve(information, score)), information

    def _prior(self) -> NDArray[np.float64]:
        bins = self.observed.shape[1]
        spread = [self.shift_prior_kev] * bins + [NOISE_PRIOR_KEV2, DEAD_TIME_PRIOR]
        return np.concatenate([np.zeros(self.exposures), np.array(spread) ** -2.0])

    def result(
        self,
        values: NDArray[np.float64],
        information: NDArray[np.float64],
        left: NDArray[np.float64],
        before: NDArray[np.float64],
    ) -> CommonDrift:
        """Collect the fit."""
        n, bins = left.shape
        covariance = np.linalg.inv(information)
        error = np.sqrt(np.diag(covariance))
        square = self._prior() @ values**2
        for b in range(bins):
            square += left[:, b] @ np.linalg.solve(self.covariance[b], left[:, b])
        output = np.exp(values[:n])
        return CommonDrift(
            output=output,
            output_error=output * error[:n],
            shift_kev=values[self.shifts],
            shift_error_kev=error[self.shifts],
            shift_covariance=np.asarray(covariance[self.shifts, self.shifts]),
            variance_kev2=float(values[-2]),
            variance_error_kev2=float(error[-2]),
            ln_dead_time=float(values[-1]),
            ln_dead_time_error=float(error[-1]),
            residual=left,
            residual_error=np.sqrt(np.diagonal(self.covariance, axis1=1, axis2=2)).T,
            before=before,
            chi_square=float(square),
            # each prior is a datum for its unknown: outputs alone cost freedom
            freedom=n * bins - n,
        )


def _moved(
    calibration: Calibration,
    shift_kev: NDArray[np.float64],
    variance_kev2: float,
    ln_dead_time: float,
) -> Calibration:
    model = calibration.model.with_dead_time(float(np.exp(ln_dead_time)))
    variance = max(model.noise_kev**2 + variance_kev2, 0.25 * model.noise_kev**2)
    return replace(
        calibration,
        levels_kev=calibration.levels_kev + shift_kev,
        model=replace(model, noise_kev=float(np.sqrt(variance))),
    )
