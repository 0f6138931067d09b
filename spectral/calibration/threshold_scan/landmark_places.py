"""Where one landmark lies in every pixel: start, fit, and what may be doubted."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from spectral.calibration.threshold_scan.coarse_scale import pixel_shifts
from spectral.calibration.threshold_scan.flags import ThresholdFlag
from spectral.calibration.threshold_scan.landmark_curve import (
    CLOUD,
    FIRST_TERM,
    LN_HEIGHT,
    LN_WIDTH,
    SHIFT,
    CurveTable,
)
from spectral.calibration.threshold_scan.landmark_fit import CurvePrior, fit_curves
from spectral.calibration.threshold_scan.landmark_prior import (
    SharedTerms,
    free_prior,
    learned_prior,
    shared_places,
)
from spectral.calibration.threshold_scan.landmark_teaching import (
    NOISE_START_KEV,
    average_curve,
    averaged_terms,
    settings_used,
    taught_terms,
)
from spectral.calibration.threshold_scan.landmarks import LINE

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.calibration.threshold_scan.landmark_fit import CurveFit

SAMPLE = 1500
"""Pixels that teach the prior."""
LEAST_SIGNIFICANCE = 6.0
"""Height over its standard error that a step needs."""
CHANCE = 1e-5
ODD_WIDTH = float(np.log(2.0))
CLOUD_MODEL_ERROR = 0.1
"""ln of the clouds' variance: what one number for all clouds may leave wrong."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LandmarkPlaces:
    """Places of one landmark, in keV from where the rough scale expects it.

    Attributes
    ----------
    shift_kev, error_kev : arrays, shape (pixel,), in keV
        NaN where there is none.
    width_kev : array, shape (pixel,), in keV
    deviance_ratio : array, shape (pixel,)
        Poisson deviance per degree of freedom.
    flags : array of uint16, shape (pixel,)
    common_error_kev : float, in keV
        Standard deviation of what all pixels' places have in common.
    cloud : float
        Learned ln of the clouds' variance over the sensor's description.
    """

    shift_kev: NDArray[np.float64]
    error_kev: NDArray[np.float64]
    width_kev: NDArray[np.float64]
    deviance_ratio: NDArray[np.float64]
    flags: NDArray[np.uint16]
    common_error_kev: float
    cloud: float


def find_places(
    build: Callable[[float], CurveTable],
    e_kev: NDArray[np.float64],
    counts: NDArray[np.float64],
    good: NDArray[np.bool_],
    *,
    expected_kev: NDArray[np.float64] | None = None,
    noise_kev: float = NOISE_START_KEV,
    cloud: float | None = None,
) -> LandmarkPlaces:
    """Places of a landmark in all pixels.

    Parameters
    ----------
    build : callable
        Gives the table for a cloud (ln of a factor on the variance).
    e_kev : array, shape (setting,), in keV
        Rough energy of each setting, less the landmark's; rising.
    counts : array, shape (pixel, setting)
    good : array of bool, shape (pixel,)
    expected_kev : array, shape (pixel,), optional
        Where other landmarks place it; without it the pixels' own curves are compared
        with the average.
    noise_kev : float, in keV
        Noise expected.
    cloud : float, optional
        What other lines have taught of the clouds (ln of a factor on the variance).

    Raises
    ------
    CalibrationError
        If too few settings lie about the landmark.
    """
    table = build(0.0 if cloud is None else cloud)
    totals = counts.sum(axis=1)
    middle = np.median(totals[good])
    sound = good & (totals > 0.3 * middle) & (totals < 3.0 * middle)
    mean_counts = counts[sound].mean(axis=0)
    average = average_curve(table, e_kev, mean_counts, noise_kev=noise_kev)
    start = np.tile(average, (counts.shape[0], 1))
    if expected_kev is None:
        start[:, SHIFT], start[:, LN_HEIGHT] = pixel_shifts(
            table, e_kev, counts, average
        )
    else:
        start[:, SHIFT] = expected_kev
        size = np.maximum(totals / mean_counts.sum(), 1e-3)
        start[:, LN_HEIGHT] += np.log(size)
    used = settings_used(
        table, e_kev, start[:, SHIFT], float(np.exp(average[LN_WIDTH]))
    )
    sample = np.flatnonzero(sound)
    sample = sample[:: max(1, sample.size // SAMPLE)]
    if table.landmark.order == LINE:
        table, shared = taught_terms(
            build,
            table,
            e_kev,
            counts[sample],
            used[sample],
            start[sample],
            noise_kev,
            cloud is not None,
        )
    else:
        summed = counts[sound].sum(axis=0)
        shared = averaged_terms(table, e_kev, summed, average, noise_kev)
    prior = learned_prior(table, shared, free_prior(table, noise_kev))
    rows = np.flatnonzero(good)
    begin = start[rows]
    begin[:, LN_WIDTH] = prior.mean[LN_WIDTH]
    begin[:, FIRST_TERM:] = prior.mean[FIRST_TERM:]
    fit = fit_curves(table, e_kev, counts[rows], used[rows], begin, prior)
    return _collect(table, e_kev, used[rows], fit, prior, shared, rows, len(counts))


def _collect(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    used: NDArray[np.bool_],
    fit: CurveFit,
    prior: CurvePrior,
    shared: SharedTerms,
    rows: NDArray[np.int64],
    pixels: int,
) -> LandmarkPlaces:
    """Places of all pixels from the fits of the good ones."""
    ratio = fit.deviance / fit.freedom
    flags = np.full(pixels, ThresholdFlag.MASKED, np.uint16)
    doubts = _doubts(table, e_kev, used, fit.values, fit.covariance, prior)
    doubts |= np.where(fit.converged, 0, ThresholdFlag.NOT_CONVERGED).astype(np.uint16)
    flags[rows] = doubts | _poor(ratio, fit.freedom)
    error = np.sqrt(fit.covariance[:, SHIFT, SHIFT] * np.maximum(ratio, 1.0))

    def spread_out(values: NDArray[np.float64]) -> NDArray[np.float64]:
        out = np.full(pixels, np.nan)
        out[rows] = values
        return out

    return LandmarkPlaces(
        shift_kev=spread_out(fit.values[:, SHIFT]),
        error_kev=spread_out(error),
        width_kev=spread_out(np.exp(fit.values[:, LN_WIDTH])),
        deviance_ratio=spread_out(ratio),
        flags=flags,
        common_error_kev=_common_error(table, fit, shared),
        cloud=table.cloud + float(shared.mean[1]),
    )


def _common_error(table: CurveTable, fit: CurveFit, shared: SharedTerms) -> float:
    """Error of all places by what the shared terms leave open."""
    which = shared_places(table)
    typical = np.asarray(np.median(fit.covariance, axis=0))
    pull = np.linalg.solve(typical[np.ix_(which, which)], typical[which, SHIFT])
    learned = float(pull @ shared.covariance @ pull)
    by_cloud = float(typical[CLOUD, SHIFT] / typical[CLOUD, CLOUD])
    return float(np.sqrt(max(learned, 0.0) + (CLOUD_MODEL_ERROR * by_cloud) ** 2))


def _doubts(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    used: NDArray[np.bool_],
    values: NDArray[np.float64],
    covariance: NDArray[np.float64],
    prior: CurvePrior,
) -> NDArray[np.uint16]:
    """Flags that follow from the fitted values alone."""
    shift, width = values[:, SHIFT], np.exp(values[:, LN_WIDTH])
    outside = (
        (shift - width < e_kev[0])
        | (shift + width > e_kev[-1])
        | (used.sum(axis=1) < table.parameters)
    )
    height_error = np.sqrt(covariance[:, LN_HEIGHT, LN_HEIGHT])
    faint = ~(height_error < 1.0 / LEAST_SIGNIFICANCE)
    odd = np.abs(values[:, LN_WIDTH] - prior.mean[LN_WIDTH]) > ODD_WIDTH
    flags = np.where(outside, ThresholdFlag.OUT_OF_RANGE, 0)
    flags |= np.where(faint, ThresholdFlag.NO_STEP, 0)
    flags |= np.where(odd, ThresholdFlag.ODD_WIDTH, 0)
    return flags.astype(np.uint16)


def _poor(
    ratio: NDArray[np.float64], freedom: NDArray[np.float64]
) -> NDArray[np.uint16]:
    """Flag of fits worse than chance allows, the common misfit taken out."""
    common = max(float(np.median(ratio)), 1.0)
    limit = chi2.isf(CHANCE, freedom) / freedom
    poor = ~(ratio <= common * limit)
    return np.where(poor, ThresholdFlag.POOR_FIT, 0).astype(np.uint16)
