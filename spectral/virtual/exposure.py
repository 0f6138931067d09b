"""One exposure of a virtual detector: from photons upon the pixels to counts."""

from __future__ import annotations

import math
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from spectral.errors import SpectralError
from spectral.kernels.comparator import CR_RC, EXPONENTIAL, RECTANGLE
from spectral.kernels.neighbour_train import MEAN_PULSES, expose_band
from spectral.kernels.pulse_train import BEFORE, expose_pixels
from spectral.kernels.random_stream import substream_array
from spectral.virtual.pixels import PixelKind, TruePixels, jumps_kev

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.virtual.detector import VirtualDetector
    from spectral.virtual.pulse_library import PulseLibrary, RecordedPhotons

T = TypeVar("T", bound=np.generic)
SHAPE_CODE = {
    "rectangle": RECTANGLE,
    "exponential": EXPONENTIAL,
    "semi-gaussian": CR_RC,
}
NS_PER_S = 1e9
NOISE_FLOOR = 0.7
"""Peaks of the noise below this share of the lowest threshold are left out."""
LOWEST_LEVEL_KEV = 0.1
REACH_UM = 400.0
_PIXELS_PER_TASK = 64
_ROWS_PER_BAND = 16


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
    recorded : RecordedPhotons, optional
        Given: neighbours count the same photons.
    """

    detector: VirtualDetector
    pixels: TruePixels
    library: PulseLibrary
    spectrum: NDArray[np.float64]
    attenuation: NDArray[np.float64]
    seed: int
    threads: int = 2
    recorded: RecordedPhotons | None = None

    def expose(
        self,
        number: int,
        beam: Beam,
        *,
        threshold_offset_kev: float | NDArray[np.float64] = 0.0,
        progress: Callable[[int], None] | None = None,
    ) -> NDArray[np.uint32]:
        """Counts above each threshold, shape (threshold, row, column).

        Parameters
        ----------
        number : int
            Of the exposure; with the seed it fixes all that is left to chance.
        beam : Beam
        threshold_offset_kev : float, or array of shape (row, column), in keV
            Added to every threshold.
        progress : callable, optional
            Called with the number of pixels done so far.
        """
        pixels = self.pixels
        rng = np.random.default_rng([self.seed, number])
        levels = pixels.thresholds_kev + threshold_offset_kev + jumps_kev(pixels, rng)
        train = _train(pixels, np.maximum(levels, LOWEST_LEVEL_KEV))
        key = substream_array(
            np.array([self.seed], np.uint64), np.array([number + 1], np.uint64)
        )[0]
        counts = np.zeros(train.levels.shape, np.int64)
        if self.recorded is None:
            tasks, work = self._alone(key, beam, train, counts)
        else:
            tasks, work = self._together(key, beam, train, counts, self.recorded)
        with ThreadPoolExecutor(max_workers=self.threads) as pool:
            for done in pool.map(work, tasks):
                if progress is not None:
                    progress(done)
        _break_bad(counts, pixels)
        counts = np.minimum(counts, self.detector.count_limit)
        return counts.T.reshape(levels.shape).astype(np.uint32)

    def _alone(
        self, key: np.uint64, beam: Beam, train: _Train, counts: NDArray[np.int64]
    ) -> tuple[range, Callable[[int], int]]:
        """Tasks for pixels that each see pulses of their own."""
        areal_density = beam.areal_density.reshape(beam.areal_density.shape[0], -1)
        areal_density = np.ascontiguousarray(areal_density)
        flux = _flat(beam.photons_per_s * self.pixels.area) / NS_PER_S
        shape = SHAPE_CODE[self.detector.pulse_shape]

        def work(first: int) -> int:
            last = min(first + _PIXELS_PER_TASK, counts.shape[0])
            expose_pixels(
                key, first, last, beam.duration_s * NS_PER_S, shape, self.spectrum,
                self.attenuation, areal_density, flux, self.library.pulses_per_photon,
                self.library.quantiles_kev, train.levels, train.gain, train.noise,
                train.noise_rate, train.noise_floor, train.pulse_time, counts,
            )  # fmt: skip
            return int(last)

        return range(0, counts.shape[0], _PIXELS_PER_TASK), work

    def _together(
        self,
        key: np.uint64,
        beam: Beam,
        train: _Train,
        counts: NDArray[np.int64],
        recorded: RecordedPhotons,
    ) -> tuple[range, Callable[[int], int]]:
        """Tasks for pixels that share the photons' pulses with their neighbours."""
        rows, columns = self.pixels.area.shape
        reach = neighbour_reach(self.detector.sensor.pitch_um)
        around = ((reach, reach), (reach, reach))
        flux = np.pad(beam.photons_per_s * self.pixels.area / NS_PER_S, around, "edge")
        areal_density = np.pad(beam.areal_density, ((0, 0), *around), "edge")
        materials = areal_density.shape[0]
        busiest = flux.max() * float(self.spectrum @ self.library.pulses_per_photon)
        busiest += float(train.noise_rate.max())
        duration = beam.duration_s * NS_PER_S
        start = -BEFORE * float(train.pulse_time.max())
        slice_ns = MEAN_PULSES / busiest if busiest > 0.0 else duration - start
        shape = SHAPE_CODE[self.detector.pulse_shape]
        seen = self.spectrum * recorded.share

        def work(first: int) -> int:
            last = min(first + _ROWS_PER_BAND, rows)
            sources = slice(first, last + 2 * reach)
            own = slice(first * columns, last * columns)
            pulses = expose_band(
                key, first, last - first, columns, reach, start, duration, slice_ns,
                shape, seen, self.attenuation,
                np.ascontiguousarray(areal_density[:, sources].reshape(materials, -1)),
                flux[sources].reshape(-1), recorded.first_photon, recorded.begin,
                recorded.height_kev, recorded.offset, train.levels[own],
                train.gain[own], train.noise[own], train.noise_rate[own],
                train.noise_floor[own], train.pulse_time[own], counts[own],
            )  # fmt: skip
            if pulses < 0:
                msg = "a slice of time held too many pulses in one pixel"
                raise SpectralError(msg)
            return int(last * columns)

        return range(0, rows, _ROWS_PER_BAND), work


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Train:
    """What the pulse trains need of each pixel, as the kernels name it."""

    levels: NDArray[np.float64]
    gain: NDArray[np.float64]
    noise: NDArray[np.float64]
    noise_rate: NDArray[np.float64]
    noise_floor: NDArray[np.float64]
    pulse_time: NDArray[np.float64]


def _train(pixels: TruePixels, levels: NDArray[np.float64]) -> _Train:
    """Flat arrays of all pixels; ``levels`` has shape (threshold, row, column)."""
    by_pixel = np.ascontiguousarray(levels.reshape(levels.shape[0], -1).T)
    noise = _flat(pixels.noise_kev)
    floor = NOISE_FLOOR * by_pixel[:, 0]
    pulse_time = _flat(pixels.pulse_time_ns)
    return _Train(
        levels=by_pixel,
        gain=_flat(pixels.gain),
        noise=noise,
        noise_rate=_noise_rate(noise, floor, pulse_time),
        noise_floor=floor,
        pulse_time=pulse_time,
    )


def neighbour_reach(pitch_um: float) -> int:
    """Pixels that a photon's pulses may be apart, from 2 to 8.

    K photons of heavy sensors go some 0.1-0.2 mm; what goes further than 0.4 mm is
    given to the last pixel in reach.
    """
    return min(max(math.ceil(REACH_UM / pitch_um), 2), 8)


def _break_bad(counts: NDArray[np.int64], pixels: TruePixels) -> None:
    """Overwrite the counts (pixel, threshold) of pixels that do not work."""
    kind = _flat(pixels.kind)
    counts[(kind == PixelKind.DEAD) | (kind == PixelKind.BROKEN_COLUMN)] = 0
    stuck = kind == PixelKind.STUCK
    counts[stuck] = _flat(pixels.stuck_count)[stuck, None]


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
    safe = np.maximum(noise_kev, 1e-3 * floor_kev)  # below: no peak ever
    return np.asarray(
        np.exp(-0.5 * (floor_kev / safe) ** 2) / (2.0 * np.pi * pulse_time_ns)
    )


def _flat(image: NDArray[T]) -> NDArray[T]:
    return np.ascontiguousarray(image).reshape(-1)
