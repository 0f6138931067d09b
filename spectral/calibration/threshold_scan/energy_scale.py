"""A straight line from settings to keV in every pixel, through its landmarks."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from spectral.calibration.threshold_scan.flags import ThresholdFlag

if TYPE_CHECKING:
    from numpy.typing import NDArray

PLACE_FLOOR_KEV = 0.02
"""Error of a place that counting statistics do not show: the steps between settings,
and companions taken at the average pixel's gain."""
CHANCE = 1e-5
ODD_SCALE_TIMES = 8.0
"""An offset or gain this many robust standard deviations from the median is odd."""
MAD_TO_SIGMA = 1.4826
"""Median absolute deviation to standard deviation of a normal distribution."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EnergyScale:
    """Straight lines E = offset + gain x setting.

    Attributes
    ----------
    offset_kev, gain_kev : arrays, shape (pixel,)
        keV, and keV per unit of setting; NaN where there is none.
    covariance : array, shape (pixel, 3)
        Variance of the offset, covariance, variance of the gain.
    common_covariance : array, shape (3,)
        The same of what all pixels have in common.
    chi_square, freedom : arrays, shape (pixel,)
        Of the landmarks about the line, their mean residual taken out.
    residual_kev : array, shape (landmark,)
        Mean over the pixels of fitted minus known energy.
    flags : array of uint16, shape (pixel,)
    """

    offset_kev: NDArray[np.float64]
    gain_kev: NDArray[np.float64]
    covariance: NDArray[np.float64]
    common_covariance: NDArray[np.float64]
    chi_square: NDArray[np.float64]
    freedom: NDArray[np.int64]
    residual_kev: NDArray[np.float64]
    flags: NDArray[np.uint16]


def fit_energy_scale(
    energy_kev: NDArray[np.float64],
    place: NDArray[np.float64],
    error: NDArray[np.float64],
    usable: NDArray[np.bool_],
    common_error_kev: NDArray[np.float64],
) -> EnergyScale:
    """Energy scale of every pixel.

    Parameters
    ----------
    energy_kev : array, shape (landmark,), in keV
    place, error : arrays, shape (landmark, pixel), in units of setting
        Setting at which each landmark lies, and its standard error.
    usable : array of bool, shape (landmark, pixel)
    common_error_kev : array, shape (landmark,), in keV
        Errors of the places that all pixels share.

    Notes
    -----
    Weighted least squares of setting on energy, whose errors are none to speak of, and
    the inverse line by first-order propagation. Where chi-square exceeds its freedom,
    the covariance is enlarged by their ratio. Source: R. T. Birge, Phys. Rev. 40
    (1932) 207.
    """
    weight = np.where(usable, 1.0 / np.where(usable, error, 1.0) ** 2, 0.0)
    held = np.where(usable, place, 0.0)
    enough = _distinct(energy_kev, usable) >= 2
    origin, slope, covariance = _regress(energy_kev, held, weight, enough)
    gain = 1.0 / slope
    offset = -origin * gain
    left = np.where(usable & enough, energy_kev[:, None] - offset - gain * held, np.nan)
    residual = -_median(left)
    freedom = np.where(enough, usable.sum(axis=0) - 2, 0)
    scaled = (left + residual[:, None]) / (gain * np.where(usable, error, 1.0))
    chi_square = np.where(enough, np.nansum(scaled**2, axis=0), np.nan)
    flags, factor = _judge(chi_square, freedom, offset, gain, enough)
    turn = np.zeros((gain.size, 2, 2))  # d(offset, gain) / d(origin, slope)
    turn[:, 0, 0] = -gain
    turn[:, 0, 1] = origin * gain**2
    turn[:, 1, 1] = -(gain**2)
    moved = turn @ covariance @ turn.transpose(0, 2, 1) * factor[:, None, None]
    common = np.hypot(common_error_kev, np.where(np.isfinite(residual), residual, 0.0))
    return EnergyScale(
        offset_kev=np.where(enough, offset, np.nan),
        gain_kev=np.where(enough, gain, np.nan),
        covariance=np.where(enough[:, None], _packed(moved), np.nan),
        common_covariance=_common(energy_kev, offset, gain, weight, enough, common),
        chi_square=chi_square,
        freedom=freedom,
        residual_kev=residual,
        flags=flags,
    )


def _distinct(
    energy_kev: NDArray[np.float64], usable: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """Number of different energies that each pixel can use."""
    known = np.unique(energy_kev)
    seen = [np.any(usable[energy_kev == e], axis=0) for e in known]
    return np.asarray(np.sum(seen, axis=0))


def _median(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Median of each row without NaN; NaN for a row that holds nothing else."""
    return np.array(
        [
            np.median(r[np.isfinite(r)]) if np.isfinite(r).any() else np.nan
            for r in values
        ]
    )


def _regress(
    energy_kev: NDArray[np.float64],
    place: NDArray[np.float64],
    weight: NDArray[np.float64],
    enough: NDArray[np.bool_],
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Setting at 0 keV, setting per keV, and their covariance (pixel, 2, 2)."""
    e = energy_kev[:, None]
    total = np.where(enough, weight.sum(axis=0), 1.0)
    centre = (weight * e).sum(axis=0) / total
    spread = np.where(enough, (weight * (e - centre) ** 2).sum(axis=0), 1.0)
    slope = (weight * (e - centre) * place).sum(axis=0) / spread
    slope = np.where(enough & (slope != 0.0), slope, 1.0)
    origin = (weight * place).sum(axis=0) / total - slope * centre
    covariance = np.empty((total.size, 2, 2))
    covariance[:, 1, 1] = 1.0 / spread
    covariance[:, 0, 1] = covariance[:, 1, 0] = -centre / spread
    covariance[:, 0, 0] = 1.0 / total + centre**2 / spread
    return origin, slope, covariance


def _packed(matrix: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.stack([matrix[:, 0, 0], matrix[:, 0, 1], matrix[:, 1, 1]], axis=1)


def _judge(
    chi_square: NDArray[np.float64],
    freedom: NDArray[np.int64],
    offset: NDArray[np.float64],
    gain: NDArray[np.float64],
    enough: NDArray[np.bool_],
) -> tuple[NDArray[np.uint16], NDArray[np.float64]]:
    """Flags, and the factor by which each covariance grows."""
    flags = np.where(enough, 0, ThresholdFlag.TOO_FEW_LANDMARKS)
    factor = np.ones(gain.size)
    tested = enough & (freedom > 0)
    if tested.any():
        ratio = chi_square[tested] / freedom[tested]
        usual = chi2.median(freedom[tested]) / freedom[tested]
        common = max(1.0, float(np.median(ratio / usual)))
        limit = common * chi2.isf(CHANCE, freedom[tested]) / freedom[tested]
        bent = np.zeros(gain.size, bool)
        bent[tested] = ratio > limit
        flags |= np.where(bent, ThresholdFlag.NOT_STRAIGHT, 0)
        factor[tested] = np.where(bent[tested], np.maximum(ratio, common), common)
    for values in (offset, gain):
        if enough.sum() >= 16:
            middle = np.median(values[enough])
            spread = MAD_TO_SIGMA * np.median(np.abs(values[enough] - middle))
            odd = enough & (np.abs(values - middle) > ODD_SCALE_TIMES * spread)
            flags |= np.where(odd & (spread > 0.0), ThresholdFlag.ODD_SCALE, 0)
    return flags.astype(np.uint16), factor


def _common(
    energy_kev: NDArray[np.float64],
    offset: NDArray[np.float64],
    gain: NDArray[np.float64],
    weight: NDArray[np.float64],
    enough: NDArray[np.bool_],
    error_kev: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Covariance of offset and gain by independent common errors of the landmarks."""
    if not enough.any():
        return np.full(3, np.nan)
    o, g = np.median(offset[enough]), np.median(gain[enough])
    w = weight[:, enough].mean(axis=1)
    x = (energy_kev - o) / g
    centre = np.sum(w * x) / w.sum()
    spread = np.sum(w * (x - centre) ** 2)
    by_gain = w * (x - centre) / spread
    by_offset = w / w.sum() - by_gain * centre
    variance = error_kev**2
    return np.array(
        [
            np.sum(by_offset**2 * variance),
            np.sum(by_offset * by_gain * variance),
            np.sum(by_gain**2 * variance),
        ]
    )
