"""Step control of Fisher scoring, lane by lane."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from spectral.kernels.pixel_lanes import LANES

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Whole = NDArray[np.int64]

CONVERGED, STEPS_SPENT, FEW_COUNTS, SINGULAR, UNUSABLE = range(5)
RUNNING = -1
HALVINGS = 30
NEAR = 25.0  # standard errors squared, within which Newton's step is tried
SLOWEST = 0.99  # largest factor from step to step that is believed
FADING = 4.0  # times the squared bias squared: what a step leaves because q was held


@njit(nogil=True, cache=True, error_model="numpy")
def _hold_back(lane: int, a: Array, u: Array, v: Array, move: Array) -> float:
    """Step that leaves no material below 0: one at 0 stays, the first to reach it stops.

    Taking material k out of the inverse v leaves v - v[:, k] v[k, :] / v[k, k].
    """
    materials = a.shape[0]
    free = np.empty((materials, materials))
    for j in range(materials):
        move[j, lane] = 0.0
        for i in range(materials):
            free[j, i] = v[j, i, lane]
    for attempt in range(materials + 1):
        for k in range(materials):
            push = u[k, lane] if attempt == 0 else move[k, lane]
            if a[k, lane] <= 0.0 and push < 0.0 and free[k, k] > 0.0:
                pivot = free[k, k]
                column = free[:, k].copy()
                for j in range(materials):
                    for i in range(materials):
                        free[j, i] -= column[j] * column[i] / pivot
                free[k, :] = 0.0
                free[:, k] = 0.0
        for j in range(materials):
            move[j, lane] = 0.0
            for i in range(materials):
                move[j, lane] += free[j, i] * u[i, lane]
    decrement, reach, first = 0.0, 1.0, -1
    for j in range(materials):
        decrement += u[j, lane] * move[j, lane]
        if a[j, lane] + reach * move[j, lane] < 0.0:
            reach, first = -a[j, lane] / move[j, lane], j
    for j in range(materials):
        move[j, lane] = -a[j, lane] if j == first else reach * move[j, lane]
    return decrement


@njit(nogil=True, cache=True, error_model="numpy")
def advance(
    tolerance: float,
    max_steps: int,
    nonnegative: bool,
    u: Array,
    v: Array,
    sound: Array,
    regular: Array,
    along: Array,
    scored: Array,
    decrement: Array,
    newton: Array,
    straight: Array,
    second: Array,
    second_straight: Array,
    bias: Array,
    blur: Array,
    looked: Array,
    a: Array,
    base: Array,
    move: Array,
    slope: Array,
    last: Array,
    halved: Array,
    steps: Array,
    outcome: Whole,
) -> int:
    """Judge the last step of each lane and take the next; lanes that moved.

    A step is halved where it left the region of possible expectations, or went so
    far past the maximum along its line that the slope back is the steeper one.
    """
    materials = a.shape[0]
    moved = 0
    for lane in range(LANES):
        if outcome[lane] != RUNNING:
            continue
        if steps[lane] >= max_steps:  # back at the last point that was good
            outcome[lane], looked[lane] = STEPS_SPENT, 0.0
            continue
        steps[lane] += 1
        good = sound[lane] > 0.0
        if not (good and along[lane] >= -slope[lane]) and halved[lane] < HALVINGS:
            spent = steps[lane] >= max_steps
            halved[lane] += 1
            slope[lane] *= 0.5
            for j in range(materials):
                move[j, lane] *= 0.0 if spent else 0.5
                a[j, lane] = base[j, lane] + move[j, lane]
            moved += 1
            continue
        if not good:
            outcome[lane] = SINGULAR
            continue
        near = regular[lane] > 0.0 and not nonnegative
        distance = decrement[lane]
        for j in range(materials):
            base[j, lane] = a[j, lane]
            move[j, lane] = scored[j, lane]
        if nonnegative:
            distance = _hold_back(lane, a, u, v, move)
        left = distance
        if last[lane] > 0.0:  # steps shrink by this factor: the rest is a series
            factor = min(np.sqrt(max(distance, 0.0) / last[lane]), SLOWEST)
            left *= (factor / (1.0 - factor)) ** 2
        looked[lane] = 0.0
        if near and distance < NEAR and 0.0 < straight[lane] < 4.0 * distance:
            for j in range(materials):
                move[j, lane] = newton[j, lane]
            if 0.0 <= second_straight[lane] < 0.25 * straight[lane]:
                looked[lane] = 1.0
                held = FADING * bias[lane] ** 2 * straight[lane]
                left = second_straight[lane] ** 2 / straight[lane] + held + blur[lane]
                for j in range(materials):
                    move[j, lane] += second[j, lane]
        last[lane] = slope[lane] = distance
        halved[lane] = 0
        if left <= tolerance:
            outcome[lane] = CONVERGED
        elif steps[lane] >= max_steps:
            outcome[lane], looked[lane] = STEPS_SPENT, 0.0
            for j in range(materials):
                move[j, lane] = 0.0
        else:
            for j in range(materials):
                a[j, lane] = base[j, lane] + move[j, lane]
            moved += 1
    return moved
