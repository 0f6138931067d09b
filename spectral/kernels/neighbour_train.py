"""Compiled pulse trains of pixels that count the same photons.

Here photons are drawn, not pulses: each comes upon one pixel and leaves its pulses in
that pixel and its neighbours at one time. Every source pixel has its own stream of
random numbers, so any band of rows can be computed by itself, with the sources around
it drawn once more. The twin of the comparator stands in
`spectral.kernels.pulse_train_numpy`; this file adds only who gets which pulse when.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from spectral.kernels.comparator import (
    CR_RC,
    RING,
    STATE,
    count_crossings,
    finish_train,
)
from spectral.kernels.pulse_train import fill_alias
from spectral.kernels.random_stream import substream, uniform

if TYPE_CHECKING:
    from numpy.typing import NDArray

ROOM = 256  # pulses of one pixel in one slice of time
MEAN_PULSES = 48.0  # that a slice is made for
DRAWS_PER_PHOTON = 3


@njit(nogil=True, cache=True, error_model="numpy")
def _emit(
    key: np.uint64,
    source: int,
    columns: int,
    rows: int,
    until: float,
    interval: float,
    threshold: NDArray[np.float64],
    other: NDArray[np.int64],
    first_photon: NDArray[np.int64],
    begin: NDArray[np.int64],
    height: NDArray[np.float32],
    offset: NDArray[np.int16],
    reach: int,
    clock: NDArray[np.float64],
    drawn: NDArray[np.int64],
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    held: NDArray[np.int64],
) -> None:
    """Draw one source's photons up to a time and hand out their pulses."""
    padded = columns + 2 * reach
    row = source // padded - reach
    column = source % padded - reach
    kinds = threshold.size
    while clock[source] < until:
        draw = np.uint64(drawn[source] * DRAWS_PER_PHOTON)
        place = uniform(key, draw) * kinds
        kind = int(place)
        if place - kind >= threshold[kind]:
            kind = other[kind]
        many = first_photon[kind + 1] - first_photon[kind]
        photon = first_photon[kind] + int(uniform(key, draw + np.uint64(1)) * many)
        for pulse in range(begin[photon], begin[photon + 1]):
            to_row = row + min(max(offset[pulse, 0], -reach), reach)
            to_column = column + min(max(offset[pulse, 1], -reach), reach)
            if 0 <= to_row < rows and 0 <= to_column < columns:
                pixel = to_row * columns + to_column
                if held[pixel] < times.shape[1]:
                    times[pixel, held[pixel]] = clock[source]
                    heights[pixel, held[pixel]] = height[pulse]
                held[pixel] += 1
        clock[source] -= interval * math.log(uniform(key, draw + np.uint64(2)))
        drawn[source] += 1


@njit(nogil=True, cache=True, error_model="numpy")
def _sort(
    times: NDArray[np.float64], heights: NDArray[np.float64], pulses: int
) -> None:
    """Order pulses by time; they come as a few ordered runs."""
    for i in range(1, pulses):
        t, h = times[i], heights[i]
        j = i
        while j > 0 and times[j - 1] > t:
            times[j] = times[j - 1]
            heights[j] = heights[j - 1]
            j -= 1
        times[j], heights[j] = t, h


@njit(nogil=True, cache=True, error_model="numpy")
def _add_noise(
    key: np.uint64,
    pixel: int,
    until: float,
    rate: float,
    noise: float,
    floor: float,
    clock: NDArray[np.float64],
    drawn: NDArray[np.int64],
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    held: int,
) -> int:
    """Add peaks of the noise itself up to a time; returns the pulses held."""
    if rate <= 0.0:
        return held
    while clock[pixel] < until:
        draw = np.uint64(2 * drawn[pixel])
        peak = floor * floor - 2.0 * noise * noise * math.log(uniform(key, draw))
        if held < times.size:
            times[held] = clock[pixel]
            heights[held] = math.sqrt(peak)
        held += 1
        clock[pixel] -= math.log(uniform(key, draw + np.uint64(1))) / rate
        drawn[pixel] += 1
    return held


@njit(nogil=True, cache=True, error_model="numpy")
def _spread(
    key: np.uint64,
    drawn: int,
    gain: float,
    noise: float,
    heights: NDArray[np.float64],
    pulses: int,
) -> None:
    """Apply a pixel's gain and electronic noise."""
    for i in range(pulses):
        draw = np.uint64(2 * (drawn + i))
        radius = noise * math.sqrt(-2.0 * math.log(uniform(key, draw)))
        angle = 2.0 * math.pi * uniform(key, draw + np.uint64(1))
        heights[i] = max(gain * heights[i] + radius * math.cos(angle), 0.0)


@njit(nogil=True, cache=True, error_model="numpy")
def _prepare_sources(
    spectrum: NDArray[np.float64],
    attenuation: NDArray[np.float64],
    areal_density: NDArray[np.float64],
    flux: NDArray[np.float64],
    threshold: NDArray[np.float64],
    other: NDArray[np.int64],
    interval: NDArray[np.float64],
) -> None:
    """Alias table and mean interval of each source's photons."""
    order = np.empty(spectrum.size, np.int64)
    weights = np.empty(spectrum.size)
    for source in range(flux.size):
        for e in range(spectrum.size):
            depth = 0.0
            for m in range(attenuation.shape[0]):
                depth += attenuation[m, e] * areal_density[m, source]
            weights[e] = flux[source] * spectrum[e] * math.exp(-depth)
        rate = fill_alias(weights, threshold[source], other[source], order)
        interval[source] = 1.0 / rate if rate > 0.0 else math.inf


@njit(nogil=True, cache=True, error_model="numpy")
def expose_band(
    key: np.uint64,
    first_row: int,
    rows: int,
    columns: int,
    reach: int,
    start: float,
    duration: float,
    slice_ns: float,
    shape: int,
    spectrum: NDArray[np.float64],
    attenuation: NDArray[np.float64],
    areal_density: NDArray[np.float64],
    flux: NDArray[np.float64],
    first_photon: NDArray[np.int64],
    begin: NDArray[np.int64],
    height: NDArray[np.float32],
    offset: NDArray[np.int16],
    levels: NDArray[np.float64],
    gain: NDArray[np.float64],
    noise: NDArray[np.float64],
    noise_rate: NDArray[np.float64],
    noise_floor: NDArray[np.float64],
    pulse_time: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> int:
    """Counts of a band of ``rows`` rows in one exposure.

    Parameters
    ----------
    key : uint64
        Stream of the exposure.
    first_row, rows, columns : int
        The band, and the width of the detector.
    reach : int
        Rows and columns around the band whose photons are drawn too. Pulses that go
        further are given to the last pixel in reach.
    start, duration, slice_ns : float, in ns
        First arrivals come after ``start`` (before 0, the same for all bands);
        length of the exposure, and of the slices that it is computed in.
    shape : int
        As in `count_crossings`.
    spectrum : array, shape (energy,)
        Share of photons of each energy that leave a pulse, in the open beam.
    attenuation : array, shape (material, energy), in cm2/g
    areal_density, flux : arrays, shape (material, source), (source,)
        Of the sources (row, column) around and in the band, in g/cm2 and 1/ns.
    first_photon : array, shape (energy + 1,)
        First of each energy's recorded photons.
    begin, height, offset : arrays
        Their pulses, as `transport` fills them.
    levels, gain, noise, noise_rate, noise_floor, pulse_time, counts
        As in `expose_pixels`, of the band's pixels only.

    Returns
    -------
    int
        Number of pulses, or -1 if a slice held too many.
    """
    sources = flux.size
    pixels = rows * columns
    threshold = np.empty((sources, spectrum.size))
    other = np.empty((sources, spectrum.size), np.int64)
    interval = np.empty(sources)
    _prepare_sources(
        spectrum, attenuation, areal_density, flux, threshold, other, interval
    )
    clock = np.empty(sources)
    drawn = np.zeros(sources, np.int64)
    padded = columns + 2 * reach
    light = substream(key, np.uint64(0))
    dark = substream(key, np.uint64(1))
    peaks = substream(key, np.uint64(2))
    for source in range(sources):
        own = substream(light, np.uint64(first_row * padded + source))
        drawn[source] = 1
        clock[source] = start - interval[source] * math.log(uniform(own, np.uint64(2)))
    noise_clock = np.empty(pixels)
    noise_drawn = np.ones(pixels, np.int64)
    for pixel in range(pixels):
        own = substream(peaks, np.uint64(first_row * columns + pixel))
        wait = -math.log(uniform(own, np.uint64(1)))
        rate = noise_rate[pixel]
        noise_clock[pixel] = start + wait / rate if rate > 0.0 else math.inf
    times = np.empty((pixels, ROOM))
    heights = np.empty((pixels, ROOM))
    held = np.zeros(pixels, np.int64)
    spread = np.zeros(pixels, np.int64)
    state = np.zeros((pixels, STATE))
    state[:, 2] = start
    ring = np.empty((pixels, 2, RING))
    now = start
    while now < duration:
        now = min(now + slice_ns, duration)
        held[:] = 0
        for source in range(sources):
            own = substream(light, np.uint64(first_row * padded + source))
            _emit(
                own, source, columns, rows, now, interval[source], threshold[source],
                other[source], first_photon, begin, height, offset, reach, clock,
                drawn, times, heights, held,
            )  # fmt: skip
        for pixel in range(pixels):
            number = np.uint64(first_row * columns + pixel)
            if held[pixel] > ROOM:
                return -1
            _sort(times[pixel], heights[pixel], held[pixel])
            own = substream(dark, number)
            _spread(
                own, spread[pixel], gain[pixel], noise[pixel], heights[pixel],
                held[pixel],
            )  # fmt: skip
            spread[pixel] += held[pixel]
            pulses = _add_noise(
                substream(peaks, number), pixel, now, noise_rate[pixel], noise[pixel],
                noise_floor[pixel], noise_clock, noise_drawn, times[pixel],
                heights[pixel], held[pixel],
            )  # fmt: skip
            if pulses > ROOM:
                return -1
            if pulses > held[pixel]:
                _sort(times[pixel], heights[pixel], pulses)
            count_crossings(
                shape, times[pixel], heights[pixel], pulses, pulse_time[pixel],
                levels[pixel], state[pixel], ring[pixel], counts[pixel],
            )  # fmt: skip
    total = 0
    for pixel in range(pixels):
        if shape == CR_RC:
            finish_train(
                duration, pulse_time[pixel], levels[pixel], state[pixel], counts[pixel]
            )
        total += spread[pixel]
    return total
