"""One exposure of a virtual detector: from photons upon the pixels to counts."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.kernels.pulse_train import (
    CR_RC,
    EXPONENTIAL,
    RECTANGLE,
    expose_pixels,
)
from spectral.kernels.random_stream import substream_array
from spectral.virtual.pixels import PixelKind, TruePixels, jumps_kev

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.virtual.detector import VirtualDetector
    from spectral.virtual.pulse_library import PulseLibrary

SHAPE_CODE = {
    "rectangle": RECTANGLE,
    "exponential": EXPONENTIAL,
    "semi-gaussian": CR_RC,
}
NS_PER_S = 1e9
NOISE_FLOOR = 0.7
"""Peaks of the noise below this share of the lowest threshold are left out."""
_PIXELS_PER_TASK = 64


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Beam:
    """What falls upon the pixels in one exposure.

    Attributes
    ----------
    duration_s : float, in s
    photons_per_s : array, shape (row, column), in 1/s
        In the open beam, upon a pixel of nominal area.
    areal_density : array, shape (material, row, column), in g/cm2
    """

    duration_s: float
    photons_per_s: NDArray[np.float64]
    areal_density: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class VirtualBench:
    """A detector with its pixels, ready to be exposed.

    Attributes
    ----------
    detector : VirtualDetector
    pixels : TruePixels
    library : PulseLibrary
    spectrum : array, shape (energy,)
        Shares of photons in the open beam, in the library's bins.
    attenuation : array, shape (material, energy), in cm2/g
    seed, threads : int
    """

    detector: VirtualDetector
    pixels: TruePixels
    library: PulseLibrary
    spectrum: NDArray[np.float64]
    attenuation: NDArray[np.float64]
    seed: int
    threads: int = 2

    def expose(
        self, number: int, beam: Beam, *, threshold_offset_kev: float = 0.0
    ) -> NDArray[np.uint32]:
        """Counts above each threshold, shape (threshold, row, column).

        Parameters
        ----------
        number : int
            Of the exposure; with the seed it fixes all that is left to chance.
        beam : Beam
        threshold_offset_kev : float, in keV
            Added to every threshold.
        """
        pixels = self.pixels
        rng = np.random.default_rng([self.seed, number])
        levels = pixels.thresholds_kev + threshold_offset_kev + jumps_kev(pixels, rng)
        counts = self._count(number, beam, _by_pixel(np.maximum(levels, 0.1)))
        counts[_flat(pixels.kind == PixelKind.DEAD)] = 0
        counts[_flat(pixels.kind == PixelKind.BROKEN_COLUMN)] = 0
        stuck = _flat(pixels.kind == PixelKind.STUCK)
        counts[stuck] = _flat(pixels.stuck_count)[stuck, None]
        counts = np.minimum(counts, self.detector.count_limit)
        return counts.T.reshape(levels.shape).astype(np.uint32)

    def _count(
        self, number: int, beam: Beam, levels: NDArray[np.float64]
    ) -> NDArray[np.int64]:
        """Counts of shape (pixel, threshold), all pixels taken as working."""
        pixels = self.pixels
        noise = _flat(pixels.noise_kev)
        floor = NOISE_FLOOR * levels[:, 0]
        key = substream_array(
            np.array([self.seed], np.uint64), np.array([number + 1], np.uint64)
        )[0]
        counts = np.zeros(levels.shape, np.int64)
        arguments = (
            beam.duration_s * NS_PER_S,
            SHAPE_CODE[self.detector.pulse_shape],
            self.spectrum,
            self.attenuation,
            _by_material(beam.areal_density),
            _flat(beam.photons_per_s * pixels.area) / NS_PER_S,
            self.library.pulses_per_photon,
            self.library.quantiles_kev,
            levels,
            _flat(pixels.gain),
            noise,
            _noise_rate(noise, floor, _flat(pixels.pulse_time_ns)),
            floor,
            _flat(pixels.pulse_time_ns),
            counts,
        )

        def work(first: int) -> int:
            last = min(first + _PIXELS_PER_TASK, levels.shape[0])
            return int(expose_pixels(key, first, last, *arguments))

        with ThreadPoolExecutor(max_workers=self.threads) as pool:
            list(pool.map(work, range(0, levels.shape[0], _PIXELS_PER_TASK)))
        return counts


def _noise_rate(
    noise_kev: NDArray[np.float64],
    floor_kev: NDArray[np.float64],
    pulse_time_ns: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Rate of noise peaks above a floor, in 1/ns.

    Source: S. O. Rice, Bell Syst. Tech. J. 24 (1945) 46, crossing rate of Gaussian
    noise f0 exp(-U^2 / 2 sigma^2); f0 = 1/(2 pi T) for white noise through a double
    pole of time T (ratio of the spectrum's moments).
    """
    with np.errstate(divide="ignore", under="ignore"):
        exponent = np.where(noise_kev > 0.0, 0.5 * (floor_kev / noise_kev) ** 2, np.inf)
    return np.exp(-exponent) / (2.0 * np.pi * pulse_time_ns)


def _flat(image: NDArray[np.generic]) -> NDArray:  # type: ignore[type-arg]
    return np.ascontiguousarray(image).reshape(-1)


def _by_pixel(stack: NDArray[np.float64]) -> NDArray[np.float64]:
    """(threshold, row, column) to (pixel, threshold)."""
    return np.ascontiguousarray(stack.reshape(stack.shape[0], -1).T)


def _by_material(stack: NDArray[np.float64]) -> NDArray[np.float64]:
    """(material, row, column) to (material, pixel)."""
    return np.ascontiguousarray(stack.reshape(stack.shape[0], -1))
