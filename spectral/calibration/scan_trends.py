"""Slow changes within a wedge scan: tube output, and thresholds (polarisation)."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

SIGMAS = 6.0
LEAST_SHIFT_KEV = 0.03
LEAST_OUTPUT = 3e-3
UNSEEN = 5e-4
"""Relative error of a mean bin that the smooth correction may leave."""


def threshold_trend(calibration: Calibration) -> tuple[float, float]:
    """Common change of the thresholds from the first to the last exposure.

    Returns
    -------
    change, error : float, in keV

    Notes
    -----
    Each exposure's departures from the calibration are fitted by a common shift of
    all thresholds and a free output; a straight line in exposure number through the
    shifts, weighted, gives the change. Sensors of CdTe under bias drift so
    (polarisation; common practice, no source).
    """
    shift, error = _shifts(calibration)
    place = calibration.steps.exposure.astype(float)
    weight = 1.0 / error**2
    middle = np.average(place, weights=weight)
    centred = place - middle
    # the scatter of the shifts themselves counts, where it exceeds their errors
    slope = np.sum(weight * centred * shift) / np.sum(weight * centred**2)
    left = shift - np.average(shift, weights=weight) - slope * centred
    wide = max(1.0, float(np.sqrt(np.mean(left**2 * weight))))
    span = np.ptp(place)
    return float(slope * span), float(
        wide * span / np.sqrt(np.sum(weight * centred**2))
    )


def _shifts(
    calibration: Calibration,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Common threshold shift of each exposure and its error, in keV."""
    steps = calibration.steps
    rate = calibration.photons_per_mas * steps.current_ma
    tables = curve_tables(calibration.model, steps.areal_density, rate)
    names = calibration.parameter_names
    average = PixelDepartures(values=np.zeros((1, len(names))))
    above, slope = expected_above(tables, calibration.levels_kev, average)
    bins = counts_to_bins(above[0])
    moved = counts_to_bins(slope[0, ..., 1:-2].sum(axis=-1)) / bins
    shift = np.empty(bins.shape[0])
    error = np.empty(bins.shape[0])
    for e in range(bins.shape[0]):
        weight = 1.0 / (steps.error[e] ** 2 + UNSEEN**2)
        design = np.stack([moved[e], np.ones(bins.shape[1])], axis=1)
        covariance = np.linalg.inv(design.T @ (weight[:, None] * design))
        found = covariance @ design.T @ (weight * np.log1p(steps.residual[e]))
        shift[e], error[e] = found[0], np.sqrt(covariance[0, 0])
    return shift, error


def trends(calibration: Calibration) -> tuple[str, ...]:
    """Sentences about what changed within the scan, if anything did."""
    said = []
    change, error = threshold_trend(calibration)
    if abs(change) > max(SIGMAS * error, LEAST_SHIFT_KEV):
        said.append(
            f"the thresholds moved by {change:+.2f} +- {error:.2f} keV from the first "
            "to the last exposure (polarisation of the sensor?); the calibration holds "
            "for their mean"
        )
    drift = calibration.steps.drift
    first, last = drift[:3].mean(), drift[-3:].mean()
    if abs(last - first) > LEAST_OUTPUT:
        said.append(
            f"the tube's output changed by {100 * (last - first):+.1f} % from the first "
            "to the last exposures (warm-up?); taken into account"
        )
    return tuple(said)
