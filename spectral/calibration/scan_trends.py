"""Slow changes within a wedge scan: tube output, and thresholds (polarisation)."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.output_trend import output_trend, trend_terms
from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

SIGMAS = 4.0
"""Errors that a change of the thresholds must exceed; by chance once in 16000 scans."""
LEAST_SHIFT_KEV = 0.03
LEAST_OUTPUT = 5e-3
ENDS = 3
"""Exposures at each end that tell how much the output changed."""
UNSEEN = 5e-4
"""Relative error of a mean bin that the smooth correction may leave."""


def threshold_trend(calibration: Calibration) -> tuple[float, float]:
    """Common change of the thresholds from the first to the last exposure.

    Returns
    -------
    change, error : float, in keV

    Notes
    -----
    Generalised least squares on the departures of all exposures: a common threshold
    that moves evenly from exposure to exposure, a smooth course of the tube's output,
    and on top of it an output of each exposure's own, scattered as it is seen to be.
    Stacks that hide different parts of the spectrum change differently with the
    thresholds, which tells the two apart. Sensors of CdTe under bias drift so
    (polarisation; common practice, no source).
    """
    steps = calibration.steps
    left = _departures(calibration)
    moved = _by_threshold(calibration)
    bins = left.shape[1]
    course = trend_terms(steps.exposure)
    place = course[:, 1] - course[:, 1].mean()
    design = np.concatenate(
        [(moved * place[:, None])[..., None], np.repeat(course[:, None], bins, 1)],
        axis=2,
    )
    design = np.concatenate([design, moved[..., None]], axis=2)
    own = steps.error**2 + UNSEEN**2
    wander = _own_scatter(calibration) ** 2
    information = np.zeros((design.shape[2], design.shape[2]))
    score = np.zeros(design.shape[2])
    square = 0.0
    for d, y, v in zip(design, left, own, strict=True):
        weight = np.linalg.inv(np.diag(v) + wander)
        information += d.T @ weight @ d
        score += d.T @ weight @ y
        square += float(y @ weight @ y)
    covariance = np.linalg.pinv(information)
    found = covariance @ score
    # the scatter of the departures counts, where it exceeds their errors
    freedom = max(left.size - design.shape[2], 1)
    wide = max(1.0, float(np.sqrt((square - score @ found) / freedom)))
    return float(found[0]), wide * float(np.sqrt(covariance[0, 0]))


def output_changes(calibration: Calibration) -> NDArray[np.float64]:
    """Logarithm of the tube's output in each exposure, as all its bins have it."""
    steps = calibration.steps
    weight = 1.0 / (steps.error**2 + UNSEEN**2)
    return np.asarray(np.average(_departures(calibration), axis=1, weights=weight))


def _departures(calibration: Calibration) -> NDArray[np.float64]:
    """What the calibration leaves, the output included, shape (exposure, bin)."""
    steps = calibration.steps
    return np.asarray(np.log1p(steps.residual) + steps.drift[:, None])


def _own_scatter(calibration: Calibration) -> float:
    """Standard deviation of single outputs about their smooth course."""
    exposure = calibration.steps.exposure
    counting = np.median(1.0 / (calibration.steps.error**-2.0).sum(axis=1))
    output = output_changes(calibration)
    left = output - output_trend(exposure, output, at=exposure)
    wide = (1.4826 * float(np.median(np.abs(left)))) ** 2
    return float(np.sqrt(max(wide - counting, UNSEEN**2)))


def _by_threshold(calibration: Calibration) -> NDArray[np.float64]:
    """Change of ln bin counts with a common shift, shape (exposure, bin), in 1/keV."""
    steps = calibration.steps
    rate = calibration.photons_per_mas * steps.current_ma
    tables = curve_tables(calibration.model, steps.areal_density, rate)
    names = calibration.parameter_names
    average = PixelDepartures(values=np.zeros((1, len(names))))
    above, slope = expected_above(tables, calibration.levels_kev, average)
    bins = counts_to_bins(above[0])
    return np.asarray(counts_to_bins(slope[0, ..., 1:-2].sum(axis=-1)) / bins)


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
    output = output_changes(calibration)
    change = float(np.expm1(output[-ENDS:].mean() - output[:ENDS].mean()))
    if abs(change) > LEAST_OUTPUT:
        said.append(
            f"the tube's output changed by {100 * change:+.1f} % from the first "
            "to the last exposures (warm-up?); taken into account"
        )
    return tuple(said)
