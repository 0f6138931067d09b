"""Compiled comparators: how often a sum of pulses rises through each level.

Nothing here is left to chance: arrival times and heights in, crossings out. Flat
arrays in, ``counts`` added to, no validation. The NumPy twin stands in
`spectral.kernels.pulse_train_numpy`.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from numba import njit

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

RECTANGLE, EXPONENTIAL, CR_RC = 0, 1, 2
RING = 256
STATE = 6
# state: 0 signal, 1 its rising part, 2 time of last arrival, 3 oldest, 4 next, 5 held


@njit(nogil=True, cache=True, error_model="numpy", inline="always")
def _count(
    below: float,
    above: float,
    levels: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> None:
    """Count a rise through the levels between two values of the signal.

    Inlined: as a call it doubles the time of a train of CR-RC pulses.
    """
    for k in range(levels.size):
        if below < levels[k] <= above:
            counts[k] += 1


@njit(nogil=True, cache=True, error_model="numpy")
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
            _count(signal, risen, levels, counts)
        signal = risen
        ring[0, following] = t + width
        ring[1, following] = heights[i]
        following = (following + 1) & mask
        held += 1
    state[0] = signal
    state[3], state[4], state[5] = oldest, following, held


@njit(nogil=True, cache=True, error_model="numpy")
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
            _count(signal, risen, levels, counts)
        signal = risen
    state[0], state[2] = signal, last


@njit(nogil=True, cache=True, error_model="numpy")
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
    _count(signal, peak, levels, counts)


@njit(nogil=True, cache=True, error_model="numpy")
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


@njit(nogil=True, cache=True, error_model="numpy")
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
    arrival is counted when the next one comes, or by `finish_train`.
    """
    if shape == RECTANGLE:
        _rectangles(times, heights, pulses, pulse_time, levels, state, ring, counts)
    elif shape == EXPONENTIAL:
        _exponentials(times, heights, pulses, pulse_time, levels, state, counts)
    else:
        _semi_gaussians(times, heights, pulses, pulse_time, levels, state, counts)


@njit(nogil=True, cache=True, error_model="numpy")
def finish_train(
    end: float,
    peaking: float,
    levels: NDArray[np.float64],
    state: NDArray[np.float64],
    counts: NDArray[np.int64],
) -> None:
    """Count what still rises between the last arrival of a CR-RC train and its end."""
    if state[2] >= 0.0:
        _rise(state[0], state[1], (end - state[2]) / peaking, levels, counts)
