"""Counts of all pixels together, as a calibration expects them, and how surely."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import curve_tables
from spectral.kernels import pooled_reading

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.calibration.wedge_data import WedgeData

BLOCK = 8192


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
    return pooled_at(
        calibration,
        data.areal_density,
        data.current_ma,
        data.count_time_s,
        output,
        data.pixel,
    )


def pooled_at(
    calibration: Calibration,
    areal_density: NDArray[np.float64],
    current_ma: NDArray[np.float64],
    count_time_s: NDArray[np.float64],
    output: NDArray[np.float64],
    pixel: NDArray[np.int64],
    *,
    threads: int = 2,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Expected counts of pixels together in given exposures.

    Parameters
    ----------
    calibration : Calibration
    areal_density : array, shape (exposure, material), in g/cm2
    current_ma, count_time_s, output : arrays, shape (exposure,)
    pixel : array of int64, shape (pixel,)
        Flat indices.
    threads : int
        The sums do not depend on it.

    Returns
    -------
    expected, change : arrays, as `pooled`
    """
    levels = calibration.levels_kev
    rate = calibration.photons_per_mas * current_ma * output
    tables = curve_tables(calibration.model, areal_density, rate)
    shape = (output.size, levels.size)

    def block(first: int) -> NDArray[np.float64]:
        sums = np.zeros(shape), np.zeros((*shape, 4))
        pooled_reading.add_up(
            tables.curve, tables.by_rate, tables.by_variance, tables.by_dead_time,
            levels, tables.step_kev,
            calibration.pixels(pixel[first : first + BLOCK]).values, *sums,
        )  # fmt: skip
        return np.concatenate([sums[0][..., None], sums[1]], axis=-1)

    with ThreadPoolExecutor(threads) as pool:
        parts = pool.map(block, range(0, pixel.size, BLOCK))
        total = sum(parts, np.zeros((*shape, 5)))
    change = np.zeros((*shape, levels.size + 3))
    own = np.arange(levels.size)
    change[..., 0] = total[..., 1]
    change[:, own, 1 + own] = total[..., 2]
    change[..., -2:] = total[..., 3:]
    factor = np.exp(calibration.residual.log_factor(areal_density, current_ma))
    factor *= count_time_s[:, None]
    expected = counts_to_bins(total[..., 0]) * factor
    return expected, counts_to_bins(change, axis=1) * factor[..., None]


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
