"""What a calibration expects of itself: steps left out, and the pattern it leaves."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.residual import refit_residual
from spectral.calibration.result import Promise
from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

STEP_SHARE = 1e-3


def promise(calibration: Calibration) -> Promise:
    """Leave-one-step-out bias of each wedge step, and the expected fixed pattern.

    Parameters
    ----------
    calibration : Calibration

    Returns
    -------
    Promise

    Notes
    -----
    Each stack in turn, with its repeats, leaves the smooth correction, which is
    fitted again to the others; tube and sensor unknowns and the pixels' departures
    stay, as one stack among many hardly moves them. The left-out stack's mean counts
    are then decomposed by one scoring step from its true areal density. The output of
    the tube in that exposure counts as an error, as it does for an object.
    The fixed pattern follows from the posterior covariance of the departures.
    """
    steps = calibration.steps
    wedge = np.flatnonzero((steps.areal_density > 0.0).any(axis=1))
    total = np.log1p(steps.physics_residual) + steps.drift[:, None]
    bias = np.empty((wedge.size, calibration.largest.size))
    single = np.empty_like(bias)
    pattern = np.empty_like(bias)
    for i, e in enumerate(wedge):
        same = (steps.areal_density == steps.areal_density[e]).all(axis=1)
        others = ~same
        smooth = refit_residual(
            calibration.residual,
            total[others],
            steps.error[others],
            steps.areal_density[others],
            steps.current_ma[others],
        )
        areal = steps.areal_density[e : e + 1]
        wanted = smooth.log_factor(areal, steps.current_ma[e])[0]
        gain, covariance, moved, counts = _average_pixel(calibration, int(e))
        bias[i] = gain @ (counts * (total[e] - wanted))
        single[i] = np.sqrt(np.diag(covariance))
        change = gain @ moved
        own = _middle_covariance(calibration)
        pattern[i] = np.sqrt(np.diag(change @ own @ change.T)) / single[i]
    return Promise(
        exposure=steps.exposure[wedge],
        bias=bias,
        single_error=single,
        fixed_pattern=np.median(pattern, axis=0),
    )


def with_promise(calibration: Calibration) -> Calibration:
    """The calibration with its promise worked out."""
    return replace(calibration, promise=promise(calibration))


def pattern_of_shifts(calibration: Calibration) -> NDArray[np.float64]:
    """Fixed pattern were every threshold of every pixel wrong by 1 keV of its own.

    Returns
    -------
    array, shape (material,), in single-exposure errors a keV
        Median over the wedge steps, as `Promise.fixed_pattern`; small shifts alone
        follow it.
    """
    areal = calibration.steps.areal_density
    patterns = []
    for e in np.flatnonzero((areal > 0.0).any(axis=1)):
        gain, covariance, moved, _ = _average_pixel(calibration, int(e))
        change = (gain @ moved)[:, 1:-2]
        patterns.append(np.sqrt((change**2).sum(axis=1) / np.diag(covariance)))
    return np.asarray(np.median(patterns, axis=0))


def _middle_covariance(calibration: Calibration) -> NDArray[np.float64]:
    """Mean posterior covariance of the good pixels' departures."""
    good = calibration.departure_covariance[calibration.good]
    return np.asarray(good.mean(axis=0, dtype=np.float64))


def _average_pixel(
    calibration: Calibration, step: int
) -> tuple[
    NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]
]:
    """Gain, covariance, change with departures and counts of the average pixel.

    Gain (material, bin) takes a small change of the counts to one of the estimate.
    """
    steps = calibration.steps
    current = float(steps.current_ma[step])
    time = float(steps.count_time_s[step])
    areal = steps.areal_density[step]
    small = STEP_SHARE * calibration.largest
    cases = np.concatenate(
        [areal[None], areal + np.diag(small), areal - np.diag(small)]
    )
    tables = curve_tables(
        calibration.model, cases, calibration.photons_per_mas * current
    )
    names = calibration.parameter_names
    average = PixelDepartures(values=np.zeros((1, len(names))))
    above, slope = expected_above(tables, calibration.levels_kev, average)
    bins = counts_to_bins(above[0]) * time
    moved = counts_to_bins(slope[0, 0], axis=0) * time
    size = areal.size
    derivative = ((bins[1 : 1 + size] - bins[1 + size :]) / (2.0 * small[:, None])).T
    counts = bins[0]
    lost = 2.0 * calibration.dead_time_ns * 1e-9 / time
    boost = lost / max(1.0 - lost * counts.sum(), 0.1)
    inverse = np.diag(1.0 / counts) + boost
    covariance = np.linalg.inv(derivative.T @ inverse @ derivative)
    return covariance @ derivative.T @ inverse, covariance, moved, counts
