"""Maximum likelihood of the areal densities, pixel by pixel, compiled.

Expected counts of bin b are lambda_b(a) = sum_n W_bn exp(-sum_m M_nm a_m). Fisher
scoring solves D' C^-1 (N + q/2 - lambda) = 0 with D = d lambda / d a and C the
covariance of the counts, diag(lambda) - c lambda lambda' behind a dead time.

q_b = trace(F^-1 d2 lambda_b) removes the bias of first order: the expansion of Cox &
Snell 1968, J. R. Stat. Soc. B 30:248, gives for any C of that form
bias = -1/2 F^-1 D' C^-1 q, and a score moved by F times that bias has a root without
it (Firth 1993, Biometrika 80:27). Half of q acts as a few pseudo-counts, so that the
root stays finite when bins are empty.

No pixel's result depends on its neighbours in a block. `fisher_scoring_numpy` is the
same in plain NumPy.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from spectral.kernels.curvature import LARGEST_INFLATION, bend, inflate
from spectral.kernels.pixel_lanes import (
    LANES,
    ROW,
    compare,
    expect,
    inform,
    invert,
    look_ahead,
    misfit,
    observe,
    project,
    regress,
    score,
    settle,
    step,
    transmit,
)
from spectral.kernels.step_control import FEW_COUNTS, RUNNING, UNUSABLE, advance

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Weight = NDArray[np.float64] | NDArray[np.float32]
    Whole = NDArray[np.int64]

CROWDED = 4  # a block with fewer than one lane in so many still walking breaks up
_HUGE = 1e30


@njit(nogil=True, cache=True, error_model="numpy")
def _load(
    order: Whole,
    counts: Array,
    weight: Weight,
    dead: Array,
    n: Array,
    w: Array,
    c: Array,
    opened: Array,
    outcome: Whole,
) -> None:
    """Lay the pixels of order side by side; lanes left over idle with the last one."""
    bins, nodes = counts.shape[1], weight.shape[2]
    for lane in range(LANES):
        i = order[min(lane, order.shape[0] - 1)]
        c[lane] = dead[min(i, dead.shape[0] - 1)]
        usable = c[lane] >= 0.0 and lane < order.shape[0]
        for b in range(bins):
            n[b, lane] = counts[i, b]
            usable = usable and 0.0 <= n[b, lane] < _HUGE
        i = min(i, weight.shape[0] - 1)
        for b in range(bins):
            total = w.dtype.type(0.0)
            for k in range(nodes):
                w[b, k, lane] = weight[i, b, k]
                total += w[b, k, lane]
            opened[b, lane] = total
            usable = usable and 0.0 < total < _HUGE
        outcome[lane] = RUNNING if usable else UNUSABLE


@njit(nogil=True, cache=True, error_model="numpy")
def _begin(
    order: Whole,
    start: Array,
    lowest: Array,
    highest: Array,
    walk: Array,
) -> None:
    """Start every lane: no object is the first good point, the start value a step."""
    materials = lowest.shape[0]
    for lane in range(LANES):
        i = order[min(lane, order.shape[0] - 1)]
        for j in range(materials):
            if start.shape[0] > 0:
                walk[j, lane] = start[min(i, start.shape[0] - 1), j]
            walk[j, lane] = min(max(walk[j, lane], lowest[j]), highest[j])
            walk[materials + j, lane] = 0.0
            walk[2 * materials + j, lane] = walk[j, lane]
        walk[3 * materials, lane] = np.inf
        for row in range(3 * materials + 1, walk.shape[0]):
            walk[row, lane] = 0.0


@njit(nogil=True, cache=True, error_model="numpy")
def _set_aside(
    order: Whole,
    outcome: Whole,
    walk: Array,
    waiting: int,
    queue: Whole,
    state: Array,
) -> int:
    """Queue the lanes still walking with all they need to go on; new queue length."""
    for lane in range(order.shape[0]):
        if outcome[lane] == RUNNING:
            queue[waiting] = order[lane]
            for row in range(walk.shape[0]):
                state[waiting, row] = walk[row, lane]
            waiting += 1
    return waiting


@njit(nogil=True, cache=True, error_model="numpy")
def _store(
    order: Whole,
    n: Array,
    base: Array,
    move: Array,
    v: Array,
    chi: Array,
    share: Array,
    steps: Array,
    outcome: Whole,
    filled: Array,
    areal_density: Array,
    covariance: Array,
    deviance: Array,
    steps_out: Whole,
    outcome_out: Whole,
) -> None:
    """Results of a block's finished lanes; NaN where there is no estimate.

    filled is room for a number a lane.
    """
    materials, lanes = base.shape[0], order.shape[0]
    for lane in range(LANES):
        filled[lane] = 0.0
    for b in range(n.shape[0]):
        for lane in range(LANES):
            filled[lane] += 1.0 if n[b, lane] > 0.0 else 0.0
    for j in range(materials):
        for lane in range(lanes):
            areal_density[order[lane], j] = base[j, lane] + move[j, lane]
    t = 0
    for j in range(materials):
        for i in range(j, materials):
            for lane in range(lanes):
                covariance[order[lane], t] = v[j, i, lane]
            t += 1
    for lane in range(lanes):
        pixel, word = order[lane], outcome[lane]
        few = filled[lane] < materials or share[lane] > LARGEST_INFLATION
        word = FEW_COUNTS if few and word <= FEW_COUNTS else word
        deviance[pixel] = chi[lane]
        steps_out[pixel] = steps[lane]
        outcome_out[pixel] = word
        if word > FEW_COUNTS:
            areal_density[pixel, :] = np.nan
            covariance[pixel, :] = np.nan
            deviance[pixel] = np.nan


@njit(nogil=True, cache=True, error_model="numpy")
def fit_pixels(
    counts: Array,
    weight: Weight,
    minus_attenuation: Array,
    factor: Array,
    dead_fraction: Array,
    start: Array,
    coefficients: Array,
    lowest: Array,
    highest: Array,
    corrected: bool,
    nonnegative: bool,
    max_steps: int,
    tolerance: float,
    areal_density: Array,
    covariance: Array,
    deviance: Array,
    steps_out: Whole,
    outcome_out: Whole,
) -> None:
    """Fit all pixels, a block of `LANES` at a time, and fill the last five arrays.

    counts[pixel, bin]; weight[pixel or 1, bin, node]; minus_attenuation[node + pad,
    material], node + pad a multiple of 4; factor[q + pad, node + pad], 0 in the pads,
    q + pad a multiple of `MOMENTS`: ones, minus_attenuation and its products (upper
    triangle, row by row);
    dead_fraction[pixel or 1]; start[pixel or 1, material], or empty for the
    regression coefficients[feature, material], held within lowest and highest.

    A block that few lanes keep busy is given up: those wait in a queue and go on in
    blocks of their own.
    """
    pixels, bins = counts.shape
    nodes, materials = minus_attenuation.shape
    real = weight.dtype
    n, opened = np.empty((bins, ROW), real), np.empty((bins, ROW), real)
    w, c = np.zeros((bins, nodes, ROW), real), np.empty(ROW, real)
    t = np.empty((nodes, ROW), real)
    moment = np.empty((bins + 1, factor.shape[0], ROW), real)
    scale, residual = np.empty((bins + 1, ROW), real), np.empty((bins + 1, ROW), real)
    pseudo = np.empty((bins + 1, ROW), real)
    f = np.empty((materials, materials, ROW), real)
    v, extra = np.empty_like(f), np.empty_like(f)
    observed, observed_inverse = np.empty_like(f), np.empty_like(f)
    u = np.empty((materials, ROW), real)
    scored, newton = np.empty_like(u), np.empty_like(u)
    u_ahead, shift, second = np.empty_like(u), np.empty_like(u), np.empty_like(u)
    along, decrement = np.empty(ROW, real), np.empty(ROW, real)
    straight, second_straight = np.empty(ROW, real), np.empty(ROW, real)
    sound, regular = np.empty(ROW, real), np.empty(ROW, real)
    bias, blur, looked = np.empty(ROW, real), np.empty(ROW, real), np.zeros(ROW, real)
    ahead = np.empty((bins + 1, 1 + materials, ROW), real)
    ahead_scale, ahead_residual = np.empty_like(scale), np.empty_like(scale)
    walk = np.empty((3 * materials + 4, ROW), real)
    a, base = walk[:materials], walk[materials : 2 * materials]
    move, slope = walk[2 * materials : 3 * materials], walk[3 * materials]
    last, halved, steps = walk[-3], walk[-2], walk[-1]
    chi, share = np.empty(ROW, real), np.zeros(ROW, real)
    outcome = np.empty(ROW, np.int64)
    g = np.empty((materials, materials, materials, ROW), real)
    y = np.empty_like(g)
    queue, state = np.arange(pixels), np.empty((pixels, walk.shape[0]), real)
    todo, fresh = pixels, True
    while todo > 0:
        waiting = 0
        for first in range(0, todo, LANES):
            order = queue[first : min(first + LANES, todo)].copy()
            _load(order, counts, weight, dead_fraction, n, w, c, opened, outcome)
            if fresh:
                if start.shape[0] == 0:
                    regress(n, opened, residual, coefficients, a)
                _begin(order, start, lowest, highest, walk)
            else:
                for lane in range(LANES):
                    walk[:, lane] = state[min(first + lane, todo - 1)]
            few = order.shape[0] // CROWDED if todo > LANES else 0
            looked[:] = 0.0
            moved = LANES
            while moved > few:
                transmit(minus_attenuation, a, t)
                expect(factor, w, t, moment)
                inform(moment, c, scale, sound, f)
                invert(f, v, sound)
                compare(corrected, n, moment, scale, v, pseudo, residual)
                score(moment, scale, residual, u)
                project(u, move, along)
                step(v, u, scored, decrement)
                observe(moment, scale, residual, observed)
                regular[:] = 1.0
                invert(observed, observed_inverse, regular)
                step(observed_inverse, u, newton, straight)
                look_ahead(
                    moment,
                    c,
                    scale,
                    residual,
                    newton,
                    ahead,
                    ahead_scale,
                    ahead_residual,
                    blur,
                )
                score(ahead, ahead_scale, ahead_residual, u_ahead)
                step(observed_inverse, u_ahead, second, second_straight)
                score(moment, scale, pseudo, u_ahead)
                step(v, u_ahead, shift, bias)
                moved = advance(
                    tolerance,
                    max_steps,
                    nonnegative,
                    u,
                    v,
                    sound,
                    regular,
                    along,
                    scored,
                    decrement,
                    newton,
                    straight,
                    second,
                    second_straight,
                    bias,
                    blur,
                    looked,
                    a,
                    base,
                    move,
                    slope,
                    last,
                    halved,
                    steps,
                    outcome,
                )
            if moved > 0:
                waiting = _set_aside(order, outcome, walk, waiting, queue, state)
            settle(looked, ahead, moment)
            inform(moment, c, scale, sound, f)
            invert(f, v, sound)
            if corrected:
                bend(moment, scale, v, g, y)
                inflate(f, v, y, extra, share)
            misfit(n, moment, scale, max(bins - materials, 1), chi)
            _store(
                order,
                n,
                base,
                move,
                v,
                chi,
                share,
                steps,
                outcome,
                blur,
                areal_density,
                covariance,
                deviance,
                steps_out,
                outcome_out,
            )
        todo, fresh = waiting, False
