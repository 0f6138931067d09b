"""Compiled pulse trains: each pixel's pulses in time, drawn from its own stream.

Pulses are drawn block by block and handed to `spectral.kernels.comparator`. Flat arrays
in, ``counts`` filled, no validation. The NumPy twin stands in
`spectral.kernels.pulse_train_numpy`.
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
from spectral.kernels.random_stream import substream, uniform

if TYPE_CHECKING:
    from numpy.typing import NDArray

BLOCK = 256
DRAWS_PER_PULSE = 4
BEFORE = 12.0  # pulse times that a train starts before the shutter opens


@njit(nogil=True, cache=True, error_model="numpy")
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


@njit(nogil=True, cache=True, error_model="numpy")
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
    for i in range(0, times.size, 2):  # Box & Muller, Ann. Math. Stat. 29 (1958) 610
        draw = np.uint64((first + i) * DRAWS_PER_PULSE + 3)
        radius = noise * math.sqrt(-2.0 * math.log(uniform(key, draw)))
        angle = 2.0 * math.pi * uniform(key, draw + np.uint64(DRAWS_PER_PULSE))
        heights[i] = radius * math.cos(angle)
        heights[i + 1] = radius * math.sin(angle)
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
        else:
            place *= cells
            cell = int(place)
            low = quantiles[kind, cell]
            high = quantiles[kind, cell + 1]
            height = gain * (low + (place - cell) * (high - low))
            heights[i] = max(height + heights[i], 0.0)


@njit(nogil=True, cache=True, error_model="numpy")
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
        if shape == CR_RC:
            finish_train(
                duration, pulse_time[pixel], levels[pixel], state, counts[pixel]
            )
    return drawn
