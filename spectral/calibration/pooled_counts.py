"""Counts of all pixels together, as a calibration expects them, and how surely."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import curve_tables, expected_above

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.calibration.wedge_data import WedgeData

CHUNK = 2048


def pooled(
    calibration: Calibration, data: WedgeData, output: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Expected counts of all pixels together.

    Parameters
    ----------
    calibration : Calibration
    data : WedgeData
    output : array, shape (exposure,)
        Of the tube, over the calibration's.

    Returns
    -------
    expected : array, shape (exposure, bin)
    change : array, shape (exposure, bin, parameter)
        With ln output, each threshold's shift, noise variance and ln dead time.
    """
    areal, current = data.areal_density, data.current_ma
    rate = calibration.photons_per_mas * current * output
    tables = curve_tables(calibration.model, areal, rate)
    bins = calibration.levels_kev.size
    total = np.zeros((data.exposure.size, bins))
    change = np.zeros((data.exposure.size, bins, bins + 3))
    for first in range(0, data.pixel.size, CHUNK):
        pixels = calibration.pixels(data.pixel[first : first + CHUNK])
        above, slope = expected_above(tables, calibration.levels_kev, pixels)
        total += counts_to_bins(above.sum(axis=0))
        change += counts_to_bins(slope.sum(axis=0), axis=1)
    factor = np.exp(calibration.residual.log_factor(areal, current))
    factor *= data.count_time_s[:, None]
    return np.asarray(total * factor), np.asarray(change * factor[..., None])


def log_covariance(
    calibration: Calibration, data: WedgeData, counts: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Covariance of the logarithm of pooled counts, shape (bin, exposure, exposure).

    Counting statistics, the errors of the smooth correction, and what the correction
    left of the calibration's own exposures.
    """
    steps, residual = calibration.steps, calibration.residual
    terms = residual.terms(data.areal_density, data.current_ma)
    smooth = terms @ residual.covariance @ terms.T
    left = np.maximum((steps.residual**2 - steps.error**2).mean(axis=0), 0.0)
    areal = data.areal_density
    same = (areal[:, None] == areal[None]).all(axis=-1)
    total = smooth + left[:, None, None] * same
    n = np.arange(counts.shape[0])
    total[:, n, n] += 1.0 / counts.T
    return np.asarray(total)
