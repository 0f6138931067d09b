"""What a calibration expects of itself: steps left out, and the pattern it leaves."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.residual import refit_residual
from spectral.calibration.result import Promise
from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    CurveTables,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

STEP_SHARE = 1e-3
INWARD = 0.5
"""How far from a step to the middle of the steps an object is taken to lie."""


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
    The fixed pattern follows from the posterior covariance of the departures, for
    objects inside the domain: each half-way from a step to the middle of the steps.
    The open exposures of an object scan, which sharpen the pixels, are not in it.
    """
    steps = calibration.steps
    wedge = np.flatnonzero((steps.areal_density > 0.0).any(axis=1))
    total = np.log1p(steps.physics_residual) + steps.drift[:, None]
    bias = np.empty((wedge.size, calibration.largest.size))
    single = np.empty_like(bias)
    pattern = np.empty_like(bias)
    own = _middle_covariance(calibration)
    inside = _inside(steps.areal_density[wedge])
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
        areal = steps.areal_density[e]
        wanted = smooth.log_factor(areal[None], steps.current_ma[e])[0]
        gain, covariance, _, counts = _average_pixel(calibration, int(e), areal)
        bias[i] = gain @ (counts * (total[e] - wanted))
        single[i] = np.sqrt(np.diag(covariance))
        change = _change(calibration, int(e), inside[i])
        pattern[i] = np.sqrt(np.diag(change @ own @ change.T))
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
    wedge = np.flatnonzero((areal > 0.0).any(axis=1))
    changes = [
        _change(calibration, int(e), inside)[:, 1:-2]
        for e, inside in zip(wedge, _inside(areal[wedge]), strict=True)
    ]
    patterns = np.linalg.norm(np.array(changes), axis=2)
    return np.asarray(np.median(patterns, axis=0))


def _inside(areal: NDArray[np.float64]) -> NDArray[np.float64]:
    """Objects between the steps and their middle, shape (step, material)."""
    return np.asarray(areal + INWARD * (areal.mean(axis=0) - areal))


def _change(
    calibration: Calibration, step: int, areal: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Change of an estimate with each departure (material, parameter), in errors."""
    gain, covariance, moved, _ = _average_pixel(calibration, step, areal)
    return np.asarray(gain @ moved / np.sqrt(np.diag(covariance))[:, None])


def _middle_covariance(calibration: Calibration) -> NDArray[np.float64]:
    """Mean posterior covariance of the good pixels' departures."""
    good = calibration.departure_covariance[calibration.good]
    return np.asarray(good.mean(axis=0, dtype=np.float64))


def _average_pixel(
    calibration: Calibration, step: int, areal: NDArray[np.float64]
) -> tuple[
    NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]
]:
    """Gain, covariance, change with departures and counts of the average pixel.

    Behind an areal density, at the current and count time of a step. Gain (material,
    bin) takes a small change of the counts to one of the estimate.
    """
    steps, model = calibration.steps, calibration.model
    time = float(steps.count_time_s[step])
    rate = calibration.photons_per_mas * float(steps.current_ma[step])
    average = calibration.average_pixel()
    tables = curve_tables(model, areal[None], rate)
    above, slope = expected_above(tables, calibration.levels_kev, average)
    counts = counts_to_bins(above[0, 0]) * time
    moved = counts_to_bins(slope[0, 0], axis=0) * time
    size = areal.size
    small = STEP_SHARE * calibration.largest
    around = np.concatenate([areal + np.diag(small), areal - np.diag(small)])
    curve = model.counting_curves(around, np.full(2 * size, rate))
    nothing = np.zeros_like(curve)
    still = CurveTables(
        curve=curve,
        by_rate=nothing,
        by_variance=nothing,
        by_dead_time=nothing,
        step_kev=model.step_kev,
    )
    above, _ = expected_above(still, calibration.levels_kev, average)
    bins = counts_to_bins(above[0]) * time
    derivative = ((bins[:size] - bins[size:]) / (2.0 * small[:, None])).T
    lost = 2.0 * calibration.dead_time_ns * 1e-9 / time
    boost = lost / max(1.0 - lost * counts.sum(), 0.1)
    inverse = np.diag(1.0 / counts) + boost
    covariance = np.linalg.inv(derivative.T @ inverse @ derivative)
    return covariance @ derivative.T @ inverse, covariance, moved, counts
