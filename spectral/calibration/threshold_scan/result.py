"""Threshold energies of every pixel, with errors, flags and provenance."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.threshold_scan.flags import ThresholdFlag
from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

UNUSABLE = (
    ThresholdFlag.MASKED
    | ThresholdFlag.TOO_FEW_LANDMARKS
    | ThresholdFlag.NOT_STRAIGHT
    | ThresholdFlag.ODD_SCALE
)
"""Flags that forbid relying on a pixel's scale."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ThresholdEnergies:
    """keV by setting, E = offset + gain x setting; C comparators, L landmarks.

    Attributes
    ----------
    offset_kev, gain_kev : arrays, shape (C, y, x)
        keV, and keV per unit of setting; NaN where there is none.
    covariance : array, shape (3, C, y, x)
        Variance of the offset, covariance, variance of the gain: each pixel's own.
    common_covariance : array, shape (3,)
        The same of what all pixels have in common: sharing, companion lines, a scale
        that is not straight.
    chi_square : array, shape (C, y, x)
        Of the landmarks about each line.
    freedom : array of int64, shape (C, y, x)
    flags : array of uint16, shape (C, y, x)
        Bits of `ThresholdFlag`.
    noise_kev : array, shape (C, y, x), in keV
        Width of the lines' steps, mean of the usable lines.
    landmarks : tuple of str, length L
    landmark_kev : array, shape (L,), in keV
    place, place_error : arrays, shape (L, C, y, x), in units of setting
    landmark_flags : array of uint16, shape (L, C, y, x)
    residual_kev, common_error_kev : arrays, shape (L,), in keV
        Mean of fitted minus known energy; error of the place common to all pixels.
    cloud : array, shape (L,)
        ln of the charge clouds' variance over the sensor's description.
    scanned : tuple of two floats
        Lowest and highest setting scanned.
    assumptions : tuple of str
    process : dict of str
        Digests, versions: all that belongs in the record.
    """

    offset_kev: NDArray[np.float64]
    gain_kev: NDArray[np.float64]
    covariance: NDArray[np.float64]
    common_covariance: NDArray[np.float64]
    chi_square: NDArray[np.float64]
    freedom: NDArray[np.int64]
    flags: NDArray[np.uint16]
    noise_kev: NDArray[np.float64]
    landmarks: tuple[str, ...]
    landmark_kev: NDArray[np.float64]
    place: NDArray[np.float64]
    place_error: NDArray[np.float64]
    landmark_flags: NDArray[np.uint16]
    residual_kev: NDArray[np.float64]
    common_error_kev: NDArray[np.float64]
    cloud: NDArray[np.float64]
    scanned: tuple[float, float]
    assumptions: tuple[str, ...] = ()
    process: dict[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Check that the shapes agree."""
        pixels = self.offset_kev.shape
        marks = (len(self.landmarks),)
        wanted = {
            "gain_kev": pixels,
            "covariance": (3, *pixels),
            "common_covariance": (3,),
            "chi_square": pixels,
            "freedom": pixels,
            "flags": pixels,
            "noise_kev": pixels,
            "landmark_kev": marks,
            "place": (*marks, *pixels),
            "place_error": (*marks, *pixels),
            "landmark_flags": (*marks, *pixels),
            "residual_kev": marks,
            "common_error_kev": marks,
            "cloud": marks,
        }
        for name, want in wanted.items():
            came = getattr(self, name).shape
            if came != want:
                msg = f"{name} has shape {came}, offset_kev needs {want}"
                raise InputError(msg)

    @property
    def usable(self) -> NDArray[np.bool_]:
        """Pixels whose scale may be relied on, shape (C, y, x)."""
        return np.asarray((self.flags & np.uint16(UNUSABLE)) == 0)

    def comparator(self, count: int) -> NDArray[np.int64]:
        """Which comparator's scale each of ``count`` thresholds has.

        Raises
        ------
        InputError
            If several comparators were scanned, but not as many.
        """
        scanned = self.offset_kev.shape[0]
        if scanned == 1:
            return np.zeros(count, np.int64)
        if scanned != count:
            msg = (
                f"{count} settings were given, but {scanned} comparators were scanned; "
                "give one setting for each"
            )
            raise InputError(msg)
        return np.arange(count)

    def energies(
        self, settings: ArrayLike
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Energies of settings and their errors, both in keV.

        Parameters
        ----------
        settings : array, shape (threshold,)
            One for each comparator scanned, or any number if there is but one.

        Returns
        -------
        energy_kev, error_kev : arrays, shape (threshold, y, x)
            The error is each pixel's own; `common_error` adds to all alike.
        """
        setting = np.atleast_1d(np.asarray(settings, dtype=np.float64))
        which = self.comparator(setting.size)
        s = setting[:, None, None]
        energy = self.offset_kev[which] + self.gain_kev[which] * s
        own = self.covariance[:, which]
        variance = own[0] + 2.0 * s * own[1] + s**2 * own[2]
        return energy, np.sqrt(np.maximum(variance, 0.0))

    def common_error(self, settings: ArrayLike) -> NDArray[np.float64]:
        """Error in keV that all pixels share at settings, shape (threshold,)."""
        s = np.atleast_1d(np.asarray(settings, dtype=np.float64))
        one, both, two = self.common_covariance
        return np.asarray(np.sqrt(np.maximum(one + 2.0 * s * both + s**2 * two, 0.0)))


def threshold_prior(
    energies: ThresholdEnergies, settings: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Threshold shifts of the pixels as a prior for the wedge calibration.

    Parameters
    ----------
    energies : ThresholdEnergies
    settings : array, shape (threshold,)
        Settings of the wedge scan, one a threshold.

    Returns
    -------
    shift_kev : array, shape (y, x, threshold), in keV
        Threshold less the average usable pixel's; 0 where nothing is known.
    sigma_kev : array, shape (y, x, threshold), in keV
        Standard deviation; infinite where nothing is known, so that 1/sigma^2 is 0.

    Notes
    -----
    What all pixels have in common drops out of the shift, so that `common_error`
    belongs to `threshold_levels` alone.
    """
    energy, error = energies.energies(settings)
    usable = energies.usable[energies.comparator(len(energy))]
    levels = threshold_levels(energies, settings)
    shift = np.where(usable, energy - levels[:, None, None], 0.0)
    sigma = np.where(usable, error, np.inf)
    return np.moveaxis(shift, 0, -1), np.moveaxis(sigma, 0, -1)


def threshold_levels(
    energies: ThresholdEnergies, settings: ArrayLike
) -> NDArray[np.float64]:
    """Mean energy of the usable pixels at settings, in keV, shape (threshold,).

    Raises
    ------
    InputError
        If a comparator has no usable pixel.
    """
    energy, _ = energies.energies(settings)
    usable = energies.usable[energies.comparator(len(energy))]
    empty = np.flatnonzero(~usable.any(axis=(1, 2)))
    if empty.size:
        msg = f"threshold {int(empty[0]) + 1} has no pixel with a usable energy scale"
        raise InputError(msg)
    return np.array([e[u].mean() for e, u in zip(energy, usable, strict=True)])
