"""NumPy twin of `spectral.kernels.pulse_train`: the same counts, written as sums.

Where the compiled loops carry a signal from pulse to pulse, here each pulse's signal
is the sum over the pulses before it. Slow, short and independent.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.kernels.random_stream import substream_array, uniform_array

if TYPE_CHECKING:
    from numpy.typing import NDArray

RECTANGLE, EXPONENTIAL, CR_RC = 0, 1, 2
BLOCK = 256
DRAWS_PER_PULSE = 4
BEFORE = 12.0


def count_crossings(
    shape: int,
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    pulse_time: float,
    levels: NDArray[np.float64],
    end: float,
) -> NDArray[np.int64]:
    """Number of up-crossings of each level at 0 or later by a whole train.

    Parameters
    ----------
    shape : int
        `RECTANGLE`, `EXPONENTIAL` or `CR_RC`.
    times, heights : arrays, shape (pulse,), in ns and keV
    pulse_time : float, in ns
    levels : array, shape (threshold,), in keV
    end : float, in ns
        A CR-RC train's last pulse rises until then.

    Returns
    -------
    array, shape (threshold,)
    """
    if times.size == 0:
        return np.zeros(levels.size, np.int64)
    age = (times[:, None] - times[None, :]) / pulse_time
    earlier = np.tril(np.ones(age.shape, bool), -1)
    if shape == CR_RC:
        low, high = _rises(age, earlier, times, heights, pulse_time, end)
    else:
        with np.errstate(over="ignore", under="ignore"):
            left = (age < 1.0) if shape == RECTANGLE else np.exp(-age)
        low = np.where(earlier, left, 0.0) @ heights
        high = low + heights
    counted = times >= 0.0
    crossed = (low[:, None] < levels) & (levels <= high[:, None]) & counted[:, None]
    return np.asarray(crossed.sum(axis=0))


def _rises(
    age: NDArray[np.float64],
    earlier: NDArray[np.bool_],
    times: NDArray[np.float64],
    heights: NDArray[np.float64],
    peaking: float,
    end: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Signal at each arrival, and its largest value before the next one."""
    safe = np.where(earlier, age, 0.0)
    fallen = np.where(earlier, np.exp(-safe), 0.0) * np.e
    signal = (fallen * safe) @ heights
    rising = fallen @ heights + np.e * heights
    span = np.append(times[1:], end) - times
    s = np.clip(1.0 - signal / np.maximum(rising, 1e-300), 0.0, span / peaking)
    return signal, (signal + rising * s) * np.exp(-s)


def draw_pulses(
    key: np.uint64,
    pulses: int,
    start: float,
    weights: NDArray[np.float64],
    threshold: NDArray[np.float64],
    other: NDArray[np.int64],
    quantiles: NDArray[np.float32],
    gain: float,
    noise: float,
    noise_floor: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Arrival times and heights of a pixel's first pulses (an even number of them).

    Parameters
    ----------
    key : uint64
        Stream of the pixel.
    pulses : int
    start : float, in ns
    weights : array, shape (energy + 1,), in 1/ns
        Rates of the pulses of each energy, then of the noise's own peaks.
    threshold, other : arrays, shape (energy + 1,)
        Alias table of the weights.
    quantiles, gain, noise, noise_floor
        As in `spectral.kernels.pulse_train.expose_pixels`, for one pixel.

    Returns
    -------
    times, heights : arrays, shape (pulse,), in ns and keV
    """
    draw = (np.arange(pulses) * DRAWS_PER_PULSE).astype(np.uint64)
    keys = np.full(pulses, key, np.uint64)
    wait, which, place, chance = (
        uniform_array(keys, draw + np.uint64(j)) for j in range(4)
    )
    times = start + np.cumsum(-np.log(wait) / weights.sum())
    radius = noise * np.sqrt(-2.0 * np.log(np.repeat(chance[0::2], 2)))
    angle = 2.0 * np.pi * np.repeat(chance[1::2], 2)
    normal = radius * np.where(np.arange(pulses) % 2 == 0, np.cos(angle), np.sin(angle))
    kind = (which * weights.size).astype(np.int64)
    kind = np.where(which * weights.size - kind >= threshold[kind], other[kind], kind)
    peak = np.sqrt(noise_floor**2 - 2.0 * noise**2 * np.log(place))
    cells = quantiles.shape[1] - 1
    cell = (place * cells).astype(np.int64)
    lit = np.minimum(kind, quantiles.shape[0] - 1)
    low, high = quantiles[lit, cell], quantiles[lit, cell + 1]
    height = gain * (low + (place * cells - cell) * (high - low))
    height = np.maximum(height + normal, 0.0)
    return times, np.where(kind == weights.size - 1, peak, height)


def pixel_stream(key: np.uint64, pixel: int) -> np.uint64:
    """Stream of a pixel below the stream of its exposure."""
    return np.uint64(
        substream_array(np.array([key], np.uint64), np.array([pixel], np.uint64))[0]
    )
