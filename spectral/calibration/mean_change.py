"""How far the average pixel moved between two calibrations."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.common_drift import CommonDrift, chance_of_shift, met_by
from spectral.calibration.pooled_counts import log_covariance, pooled
from spectral.calibration.wedge_data import WedgeData

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MeanChange:
    """Movement of the average pixel that turns one calibration into another.

    Attributes
    ----------
    shift_kev, shift_error_kev : arrays, shape (threshold,), in keV
    shift_chance : float
        Probability of shifts at least so large, all together, if none moved.
    flux_share, flux_error : float
        New over old photons per mA s, minus 1.
    noise_kev, noise_error_kev : float, in keV
        Change of the electronic noise.
    dead_time_share, dead_time_error : float
        New over old dead time, minus 1.
    left : array, shape (exposure, bin)
        Logarithm of new over old expected counts behind the new calibration's steps
        that remains: a change of beam or sensor rather than of thresholds.
    """

    shift_kev: NDArray[np.float64]
    shift_error_kev: NDArray[np.float64]
    shift_chance: float
    flux_share: float
    flux_error: float
    noise_kev: float
    noise_error_kev: float
    dead_time_share: float
    dead_time_error: float
    left: NDArray[np.float64]


def mean_change(old: Calibration, new: Calibration) -> MeanChange:
    """Movement of the average pixel between calibrations of one setting.

    Notes
    -----
    The unknowns of two fits cannot be subtracted as they stand: what one fit calls a
    threshold another calls filtration. So the old average pixel is moved (thresholds,
    tube output, noise, dead time) until it expects the counts that the new one expects
    behind the new one's steps, and the other way round; the mean of both movements is
    given. Its error is what the counts behind those steps allow.
    """
    there = _expected_of(old, new)
    back = _expected_of(new, old)
    flux, flux_error = _both(_ln_output(there), _ln_output(back))
    variance, variance_error = _both(
        (there.variance_kev2, there.variance_error_kev2),
        (back.variance_kev2, back.variance_error_kev2),
    )
    dead, dead_error = _both(
        (there.ln_dead_time, there.ln_dead_time_error),
        (back.ln_dead_time, back.ln_dead_time_error),
    )
    noise = old.model.noise_kev
    moved = np.sqrt(max(noise**2 + variance, 0.25 * noise**2))
    shift = 0.5 * (there.shift_kev - back.shift_kev)
    together = there.shift_covariance + back.shift_covariance
    return MeanChange(
        shift_kev=shift,
        shift_error_kev=np.hypot(there.shift_error_kev, back.shift_error_kev),
        shift_chance=chance_of_shift(shift, together),
        flux_share=float(np.expm1(flux)),
        flux_error=flux_error,
        noise_kev=float(moved - noise),
        noise_error_kev=float(variance_error / (2.0 * moved)),
        dead_time_share=float(np.expm1(dead)),
        dead_time_error=dead_error,
        left=there.residual,
    )


def _both(there: tuple[float, float], back: tuple[float, float]) -> tuple[float, float]:
    """Mean movement, one way and back, and its error."""
    return 0.5 * (there[0] - back[0]), float(np.hypot(there[1], back[1]))


def _ln_output(drift: CommonDrift) -> tuple[float, float]:
    relative = drift.output_error / drift.output
    return float(np.log(drift.output).mean()), float(relative.mean())


def _expected_of(one: Calibration, other: Calibration) -> CommonDrift:
    """Drift of ``one`` that meets what ``other`` expects behind its own steps."""
    steps = other.steps
    n = steps.exposure.size
    data = WedgeData(
        exposure=steps.exposure,
        areal_density=steps.areal_density,
        current_ma=steps.current_ma,
        count_time_s=steps.count_time_s,
        above=np.zeros((1, n, other.levels_kev.size)),
        pixel=np.zeros(1, np.int64),
        shape=(1, 1),
        thresholds_kev=other.thresholds_kev,
    )
    expected, _ = pooled(_average_pixel(other), data, np.ones(n))
    covariance = log_covariance(other, data, 1.0 / steps.error**2)
    return met_by(_average_pixel(one), data, expected, covariance)


def _average_pixel(calibration: Calibration) -> Calibration:
    """The calibration of a detector whose only pixel is the average one."""
    size = len(calibration.parameter_names)
    return replace(
        calibration,
        departures=np.zeros((1, 1, size)),
        pixel_reasons=np.zeros((1, 1), np.uint16),
    )
