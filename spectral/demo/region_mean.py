"""Means of maps over a region and over repeats, with their errors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.scans.maps import Maps


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionMean:
    """One material in one region, in g/cm2.

    Attributes
    ----------
    value : float
        Mean of the unflagged estimates of all exposures.
    error : float
        Its standard error, the calibration's share included.
    single_error : float
        Median error of one pixel in one exposure.
    flagged : float
        Share of the region's estimates that carry a flag.
    """

    value: float
    error: float
    single_error: float
    flagged: float


def region_mean(
    maps: Maps, inside: NDArray[np.bool_], material: int
) -> RegionMean | None:
    """Mean of a material over a region, None if all its estimates carry a flag.

    Parameters
    ----------
    maps : Maps
        Repeats of one object.
    inside : array of bool, shape (row, column)
    material : int

    Notes
    -----
    Counting errors fall with the number of estimates. What the calibration adds is the
    same in every repeat, so that it falls with the number of pixels only; it is taken
    to be independent from pixel to pixel, which leaves out what the average pixel's
    response shares among all.
    """
    usable = maps.flags == 0
    chosen = usable & inside
    if not chosen.any():
        return None
    single = maps.areal_density_errors[:, material][chosen].astype(np.float64)
    common = maps.calibration_errors[:, material][chosen].astype(np.float64)
    pixels = int(chosen.any(axis=0).sum())
    variance = np.mean(single**2) / single.size + np.mean(common**2) / pixels
    return RegionMean(
        value=float(maps.areal_density[:, material][chosen].mean(dtype=np.float64)),
        error=float(np.sqrt(variance)),
        single_error=float(np.median(single)),
        flagged=1.0 - float(usable[:, inside].mean()),
    )


def mean_of_repeats(maps: Maps, material: int) -> NDArray[np.float64]:
    """Mean of each pixel's unflagged estimates, shape (row, column); NaN without any."""
    usable = maps.flags == 0
    count = usable.sum(axis=0)
    values = np.where(usable, maps.areal_density[:, material], 0.0)
    total = values.sum(axis=0, dtype=np.float64)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)
