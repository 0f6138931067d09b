"""What many pixels together teach of a landmark's curve."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.threshold_scan.landmark_curve import (
    CLOUD,
    LN_HEIGHT,
    LN_WIDTH,
    NORM_KEV,
    SHIFT,
    CurveTable,
    landmark_curve,
)
from spectral.calibration.threshold_scan.landmark_fit import CurvePrior, fit_curves
from spectral.calibration.threshold_scan.landmark_prior import (
    PIXEL_SHARE,
    SharedTerms,
    free_prior,
    learned_prior,
    pooled_terms,
    shared_places,
)
from spectral.calibration.threshold_scan.landmarks import EDGE, LINE
from spectral.errors import CalibrationError

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

NOISE_START_KEV = 1.5
TEACHING_ROUNDS = 3
REBUILD = 0.1
"""A learned cloud this far (ln variance) from the table's calls for a new table."""


def settings_used(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    shift_kev: NDArray[np.float64],
    width_kev: float,
) -> NDArray[np.bool_]:
    """Settings near enough to take part, shape (pixel, setting)."""
    mark = table.landmark
    furthest = max((d for d, _ in mark.companions), default=0.0)
    below = min((3.0 if mark.order == LINE else 6.0) + 3.0 * width_kev, 12.0)
    above = (4.0 if mark.order == EDGE else 2.0) + furthest + 3.0 * width_kev
    from_mark = e_kev - shift_kev[:, None]
    return np.asarray((from_mark >= -below) & (from_mark <= above))


def average_curve(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    mean_counts: NDArray[np.float64],
    *,
    noise_kev: float = NOISE_START_KEV,
) -> NDArray[np.float64]:
    """Parameters of the mean counts of all good pixels.

    Raises
    ------
    CalibrationError
        If too few settings lie about the landmark.
    """
    prior = free_prior(table, noise_kev)
    values = prior.mean[None].copy()
    height = float(np.interp(-NORM_KEV, e_kev, mean_counts))
    values[0, LN_HEIGHT] = np.log(max(height, 1e-3))
    for _ in range(3):
        used = settings_used(
            table, e_kev, values[:, SHIFT], float(np.exp(values[0, LN_WIDTH]))
        )
        if used.sum() < table.parameters + 1:
            msg = (
                f"only {int(used.sum())} settings lie about {table.landmark.name}; "
                "scan it in finer steps or over a wider range"
            )
            raise CalibrationError(msg)
        values = fit_curves(table, e_kev, mean_counts[None], used, values, prior).values
    return np.asarray(values[0])


def taught_terms(
    build: Callable[[float], CurveTable],
    table: CurveTable,
    e_kev: NDArray[np.float64],
    counts: NDArray[np.float64],
    used: NDArray[np.bool_],
    start: NDArray[np.float64],
    noise_kev: float,
    cloud_known: bool,
) -> tuple[CurveTable, SharedTerms]:
    """Table of the cloud that the pixels show, and the other terms that they share."""
    free = free_prior(table, noise_kev, cloud_known=cloud_known)
    values, mean, first_cloud = start, free.mean, table.cloud
    shared = SharedTerms(
        mean=np.empty(0), spread=np.empty(0), covariance=np.empty((0, 0))
    )
    for turn in range(TEACHING_ROUNDS):
        prior = CurvePrior(mean=mean, spread=free.spread)
        fit = fit_curves(table, e_kev, counts, used, values, prior)
        known = free.mean.copy()
        known[CLOUD] = first_cloud - table.cloud
        shared = pooled_terms(
            table, fit, prior, CurvePrior(mean=known, spread=free.spread)
        )
        values = fit.values
        mean = learned_prior(table, shared, free).mean
        if turn < TEACHING_ROUNDS - 1 and abs(mean[CLOUD]) > REBUILD:
            moved = float(np.clip(mean[CLOUD], -1.0, 1.0))
            table = build(table.cloud + moved)
            mean[CLOUD] -= moved
            values[:, CLOUD] = mean[CLOUD]
    return table, shared


def averaged_terms(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    summed: NDArray[np.float64],
    average: NDArray[np.float64],
    noise_kev: float,
) -> SharedTerms:
    """Shared terms from the sum of all pixels, for landmarks too faint in single ones.

    The sum is wider than a pixel's own curve: the noise is the one expected.
    """
    start = average[None].copy()
    start[0, LN_HEIGHT] += np.log(summed.sum()) - np.log(
        np.maximum(landmark_curve(table, e_kev, start)[0].sum(), 1e-300)
    )
    width = float(np.exp(average[LN_WIDTH]))
    used = settings_used(table, e_kev, start[:, SHIFT], width)
    prior = free_prior(table, noise_kev)
    spread = prior.spread.copy()
    spread[LN_WIDTH] = 0.5
    prior = CurvePrior(mean=prior.mean, spread=spread)
    fit = fit_curves(table, e_kev, summed[None], used, start, prior)
    which = shared_places(table)
    mean = fit.values[0, which]
    mean[0] = np.log(noise_kev)
    return SharedTerms(
        mean=mean,
        spread=PIXEL_SHARE * prior.spread[which],
        covariance=fit.covariance[0][np.ix_(which, which)],
    )
