"""Compiled pulse trains: pulses in time, and how often their sum rises through levels.

`count_crossings` is the comparator and knows nothing of chance; `expose_pixels` draws
each pixel's pulses from its own stream of random numbers and hands them over block by
block. Flat arrays in, ``counts`` filled, no validation. The NumPy twin stands in
`spectral.kernels.pulse_train_numpy`.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from spectral.kernels.random_stream import substream, uniform

if TYPE_CHECKING:
    from numpy.typing import NDArray

RECTANGLE, EXPONENTIAL, CR_RC = 0, 1, 2
BLOCK = 256
RING = 256
DRAWS_PER_PULSE = 5
STATE = 6
# state: 0 signal, 1 its rising part, 2 time of last arrival, 3 oldest, 4 next, 5 held
BEFORE = 12.0  # pulse times that a train starts before the shutter opens


@njit(nogil=True, cache=True)
def _rectangles(
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    pulses: int,
    width: float,
    levels: NDArray[np.float64],
    state: NDArray[np.float64],
    ring: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> None:
    """Up-crossings of a sum of rectangles of one width."""
    signal = state[0]
    oldest, following, held = int(state[3]), int(state[4]), int(state[5])
    mask = ring.shape[1] - 1
    lowest = levels[0]
    for i in range(pulses):
        t = times[i]
        while held > 0 and (ring[0, oldest] <= t or held > mask):
            signal -= ring[1, oldest]
            oldest = (oldest + 1) & mask
            held -= 1
        if held == 0:
            signal = 0.0
        risen = signal + heights[i]
        if t >= 0.0 and risen >= lowest:
            for k in range(levels.size):
                if signal < levels[k] <= risen:
                    counts[k] += 1
        signal = risen
        ring[0, following] = t + width
        ring[1, following] = heights[i]
        following = (following + 1) & mask
        held += 1
    state[0] = signal
    state[3], state[4], state[5] = oldest, following, held


@njit(nogil=True, cache=True)
def _exponentials(
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    pulses: int,
    decay: float,
    levels: NDArray[np.float64],
    state: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> None:
    """Up-crossings of a sum of pulses that rise at once and decay exponentially."""
    signal, last = state[0], state[2]
    lowest = levels[0]
    for i in range(pulses):
        t = times[i]
        signal *= math.exp((last - t) / decay)
        last = t
        risen = signal + heights[i]
        if t >= 0.0 and risen >= lowest:
            for k in range(levels.size):
                if signal < levels[k] <= risen:
                    counts[k] += 1
        signal = risen
    state[0], state[2] = signal, last


@njit(nogil=True, cache=True)
def _rise(
    signal: float,
    rising: float,
    span: float,
    levels: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> None:
    """Up-crossings of (signal + rising s) exp(-s) for s from 0 to ``span``."""
    if rising <= signal or rising <= 0.0:
        return
    if math.e * levels[0] > math.e * signal + rising:  # peak <= signal + rising / e
        return
    s = min(1.0 - signal / rising, span)
    peak = (signal + rising * s) * math.exp(-s)
    for k in range(levels.size):
        if signal < levels[k] <= peak:
            counts[k] += 1


@njit(nogil=True, cache=True)
def _semi_gaussians(
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    pulses: int,
    peaking: float,
    levels: NDArray[np.float64],
    state: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> None:
    """Up-crossings of a sum of CR-RC pulses (t/T) exp(1 - t/T)."""
    signal, rising, last = state[0], state[1], state[2]
    for i in range(pulses):
        span = (times[i] - last) / peaking
        if last >= 0.0:
            _rise(signal, rising, span, levels, counts)
        fall = math.exp(-span)
        signal = (signal + rising * span) * fall
        rising = rising * fall + math.e * heights[i]
        last = times[i]
    state[0], state[1], state[2] = signal, rising, last


@njit(nogil=True, cache=True)
def count_crossings(
    shape: int,
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    pulses: int,
    pulse_time: float,
    levels: NDArray[np.float64],
    state: NDArray[np.float64],
    ring: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> None:
    """Add to ``counts`` how often the sum of pulses rises through each level.

    Parameters
    ----------
    shape : int
        `RECTANGLE`, `EXPONENTIAL` or `CR_RC`.
    times, heights : arrays, shape (>= pulses,), in ns and keV
        Arrivals in order; a pulse has the height given at its peak. Arrivals before
        0 build up the signal but are not counted.
    pulses : int
    pulse_time : float, in ns
        Width, decay time or peaking time.
    levels : array, shape (threshold,), in keV
        The lowest first.
    state : array, shape (STATE,)
        Zeros at first; carries the signal from one call to the next.
    ring : array, shape (2, power of two)
        Workspace of the pulses that still stand.
    counts : array of int64, shape (threshold,)
        Added to.

    Notes
    -----
    Exact for each shape: a sum of CR-RC pulses between two arrivals is
    (a + b s) exp(-s), which has one maximum at s = 1 - a/b. Its rise after the last
    arrival is not counted until `count_crossings` meets the next one.
    """
    if shape == RECTANGLE:
        _rectangles(times, heights, pulses, pulse_time, levels, state, ring, counts)
    elif shape == EXPONENTIAL:
        _exponentials(times, heights, pulses, pulse_time, levels, state, counts)
    else:
        _semi_gaussians(times, heights, pulses, pulse_time, levels, state, counts)


@njit(nogil=True, cache=True)
def fill_alias(
    weights: NDArray[np.float64],
    threshold: NDArray[np.float64],
    other: NDArray[np.int64],
    order: NDArray[np.int64],
) -> float:
    """Prepare drawing an index with given weights; returns their sum.

    Source: A. J. Walker, ACM Trans. Math. Softw. 3 (1977) 253; M. D. Vose, IEEE Trans.
    Softw. Eng. 17 (1991) 972 (both from memory).
    """
    size = weights.size
    total = 0.0
    for i in range(size):
        total += weights[i]
    if total <= 0.0:
        return 0.0
    small, large = 0, size
    for i in range(size):
        threshold[i] = weights[i] * size / total
        other[i] = i
        if threshold[i] < 1.0:
            order[small] = i
            small += 1
        else:
            large -= 1
            order[large] = i
    while small > 0 and large < size:
        small -= 1
        low, high = order[small], order[large]
        other[low] = high
        threshold[high] -= 1.0 - threshold[low]
        if threshold[high] < 1.0:
            large += 1
            order[small] = high
            small += 1
    while small > 0:
        small -= 1
        threshold[order[small]] = 1.0
    while large < size:
        threshold[order[large]] = 1.0
        large += 1
    return total


@njit(nogil=True, cache=True)
def _draw_block(
    key: np.uint64,
    first: int,
    last_time: float,
    interval: float,
    threshold: NDArray[np.float64],
    other: NDArray[np.int64],
    quantiles: NDArray[np.float32],
    gain: float,
    noise: float,
    noise_floor: float,
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
) -> None:
    """Fill a block with arrival times and pulse heights, electronic noise included.

    The last index of the alias table stands for a peak of the noise itself.
    """
    kinds = threshold.size
    cells = quantiles.shape[1] - 1
    for i in range(times.size):
        draw = np.uint64((first + i) * DRAWS_PER_PULSE)
        last_time -= interval * math.log(uniform(key, draw))
        times[i] = last_time
        place = uniform(key, draw + np.uint64(1)) * kinds
        kind = int(place)
        if place - kind >= threshold[kind]:
            kind = other[kind]
        place = uniform(key, draw + np.uint64(2))
        if kind == kinds - 1:
            heights[i] = math.sqrt(
                noise_floor * noise_floor - 2.0 * noise * noise * math.log(place)
            )
            continue
        place *= cells
        cell = int(place)
        low = quantiles[kind, cell]
        high = quantiles[kind, cell + 1]
        heights[i] = gain * (low + (place - cell) * (high - low))
        if noise > 0.0:
            radius = math.sqrt(-2.0 * math.log(uniform(key, draw + np.uint64(3))))
            angle = 2.0 * math.pi * uniform(key, draw + np.uint64(4))
            heights[i] = max(heights[i] + noise * radius * math.cos(angle), 0.0)


@njit(nogil=True, cache=True)
def expose_pixels(
    key: np.uint64,
    first: int,
    last: int,
    duration: float,
    shape: int,
    spectrum: NDArray[np.float64],
    attenuation: NDArray[np.float64],
    areal_density: NDArray[np.float64],
    flux: NDArray[np.float64],
    pulses_per_photon: NDArray[np.float64],
    quantiles: NDArray[np.float32],
    levels: NDArray[np.float64],
    gain: NDArray[np.float64],
    noise: NDArray[np.float64],
    noise_rate: NDArray[np.float64],
    noise_floor: NDArray[np.float64],
    pulse_time: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> int:
    """Counts of pixels ``first`` to ``last`` (excluded) in one exposure.

    Parameters
    ----------
    key : uint64
        Stream of the exposure; each pixel has its own below it.
    first, last : int
    duration : float, in ns
    shape : int
        As in `count_crossings`.
    spectrum : array, shape (energy,)
        Share of photons per energy bin in the open beam.
    attenuation : array, shape (material, energy), in cm2/g
    areal_density : array, shape (material, pixel), in g/cm2
    flux : array, shape (pixel,), in 1/ns
        Photons upon each pixel in the open beam.
    pulses_per_photon : array, shape (energy,)
    quantiles : array, shape (energy, quantile), in keV
        Ordered pulse heights of each energy.
    levels : array, shape (pixel, threshold), in keV
        Thresholds; the lowest first.
    gain, noise, noise_rate, noise_floor, pulse_time : arrays, shape (pixel,)
        Factor, keV, 1/ns, keV, ns.
    counts : array, shape (pixel, threshold)
        Added to.

    Returns
    -------
    int
        Number of pulses drawn.
    """
    bins = spectrum.size
    weights = np.empty(bins + 1)
    threshold = np.empty(bins + 1)
    other = np.empty(bins + 1, np.int64)
    order = np.empty(bins + 1, np.int64)
    times = np.empty(BLOCK)
    heights = np.empty(BLOCK)
    ring = np.empty((2, RING))
    state = np.empty(STATE)
    drawn = 0
    for pixel in range(first, last):
        for e in range(bins):
            depth = 0.0
            for m in range(attenuation.shape[0]):
                depth += attenuation[m, e] * areal_density[m, pixel]
            weights[e] = (
                flux[pixel] * spectrum[e] * pulses_per_photon[e] * math.exp(-depth)
            )
        weights[bins] = noise_rate[pixel]
        rate = fill_alias(weights, threshold, other, order)
        if rate <= 0.0:
            continue
        own = substream(key, np.uint64(pixel))
        state[:] = 0.0
        state[2] = -BEFORE * pulse_time[pixel]
        now = state[2]
        block = 0
        while now < duration:
            _draw_block(
                own, block * BLOCK, now, 1.0 / rate, threshold, other, quantiles,
                gain[pixel], noise[pixel], noise_floor[pixel], times, heights,
            )  # fmt: skip
            now = times[BLOCK - 1]
            pulses = BLOCK
            while pulses > 0 and times[pulses - 1] >= duration:
                pulses -= 1
            count_crossings(
                shape, times, heights, pulses, pulse_time[pixel], levels[pixel],
                state, ring, counts[pixel],
            )  # fmt: skip
            block += 1
            drawn += pulses
        if shape == CR_RC and state[2] >= 0.0:
            span = (duration - state[2]) / pulse_time[pixel]
            _rise(state[0], state[1], span, levels[pixel], counts[pixel])
    return drawn
