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

from spectral.kernels.pixel_lanes import (
    LANES,
    LARGEST_INFLATION,
    ROW,
    bend,
    expect,
    inflate,
    inform,
    invert,
    misfit,
    observe,
    project,
    regress,
    score,
    step,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Weight = NDArray[np.float64] | NDArray[np.float32]
    Whole = NDArray[np.int64]

HALVINGS = 30
NEAR = 1.0  # standard errors squared, within which Newton's step is tried
SLOWEST_NEWTON = 1e-3  # of the squared error may outlast a Newton step (q was held)
CONVERGED, STEPS_SPENT, FEW_COUNTS, SINGULAR, UNUSABLE = range(5)
_RUNNING = -1
_HUGE = 1e290


@njit(nogil=True, cache=True, error_model="numpy")
def _load(
    first: int,
    counts: Array,
    weight: Weight,
    dead: Array,
    n: Array,
    w: Array,
    c: Array,
    opened: Array,
    outcome: Whole,
) -> None:
    """Lay the next pixels side by side; lanes left over repeat the last pixel."""
    pixels, bins = counts.shape
    nodes = weight.shape[2]
    for lane in range(LANES):
        i = min(first + lane, pixels - 1)
        c[lane] = dead[min(i, dead.shape[0] - 1)]
        outcome[lane] = _RUNNING if c[lane] >= 0.0 else UNUSABLE
        for b in range(bins):
            n[b, lane] = counts[i, b]
            if not 0.0 <= n[b, lane] < _HUGE:
                outcome[lane] = UNUSABLE
        if weight.shape[0] > 1 or first == 0:
            i = min(i, weight.shape[0] - 1)
            for b in range(bins):
                total = 0.0
                for k in range(nodes):
                    w[b, k, lane] = weight[i, b, k]
                    total += w[b, k, lane]
                opened[b, lane] = total
        for b in range(bins):
            if not 0.0 < opened[b, lane] < _HUGE:
                outcome[lane] = UNUSABLE


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
def _advance(  # noqa: PLR0912 (one lane's whole decision, kept in one loop)
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
    a: Array,
    base: Array,
    move: Array,
    slope: Array,
    last: Array,
    halved: Whole,
    steps: Whole,
    outcome: Whole,
) -> int:
    """Judge the last step of each lane and take the next; lanes that moved.

    A step is halved where it left the region of possible expectations, or went so
    far past the maximum along its line that the slope back is the steeper one.
    """
    materials = a.shape[0]
    moved = 0
    for lane in range(LANES):
        if outcome[lane] != _RUNNING:
            continue
        steps[lane] += 1
        good = sound[lane] > 0.0
        if not (good and along[lane] >= -slope[lane]) and halved[lane] < HALVINGS:
            spent = steps[lane] >= max_steps
            outcome[lane] = STEPS_SPENT if spent else _RUNNING
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
        shrink = min(1.0, distance / last[lane]) if last[lane] > 0.0 else 1.0
        if near and distance < NEAR and 0.0 < straight[lane] < 4.0 * distance:
            shrink = min(shrink, max(distance, SLOWEST_NEWTON))
            for j in range(materials):
                move[j, lane] = newton[j, lane]
        last[lane] = slope[lane] = distance
        halved[lane] = 0
        if distance * shrink <= tolerance:
            outcome[lane] = CONVERGED
        elif steps[lane] >= max_steps:
            outcome[lane] = STEPS_SPENT
            for j in range(materials):
                move[j, lane] = 0.0
        else:
            for j in range(materials):
                a[j, lane] = base[j, lane] + move[j, lane]
            moved += 1
    return moved


@njit(nogil=True, cache=True, error_model="numpy")
def _store(
    first: int,
    n: Array,
    base: Array,
    move: Array,
    v: Array,
    chi: Array,
    share: Array,
    steps: Whole,
    outcome: Whole,
    areal_density: Array,
    covariance: Array,
    deviance: Array,
    steps_out: Whole,
    outcome_out: Whole,
) -> None:
    """Results of a block; NaN where there is no estimate."""
    materials = base.shape[0]
    for lane in range(min(LANES, areal_density.shape[0] - first)):
        pixel = first + lane
        word = outcome[lane]
        filled = 0
        for b in range(n.shape[0]):
            filled += n[b, lane] > 0.0
        few = filled < materials or share[lane] > LARGEST_INFLATION
        none = word > FEW_COUNTS
        if few and not none:
            word = FEW_COUNTS
        t = 0
        for j in range(materials):
            value = base[j, lane] + move[j, lane]
            areal_density[pixel, j] = np.nan if none else value
            for i in range(j, materials):
                covariance[pixel, t] = np.nan if none else v[j, i, lane]
                t += 1
        deviance[pixel] = np.nan if none else chi[lane]
        steps_out[pixel] = steps[lane]
        outcome_out[pixel] = word


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
    material], node + pad a multiple of 4; factor[q, node + pad], 0 in the pad: ones,
    minus_attenuation and its products (upper triangle, row by row);
    dead_fraction[pixel or 1]; start[pixel or 1, material], or empty for the
    regression coefficients[feature, material], held within lowest and highest.
    """
    pixels, bins = counts.shape
    nodes, materials = minus_attenuation.shape
    n, opened = np.empty((bins, ROW)), np.empty((bins, ROW))
    w, c = np.zeros((bins, nodes, ROW)), np.empty(ROW)
    t, p = np.empty((nodes, ROW)), np.empty((nodes, ROW))
    moment = np.empty((bins + 1, factor.shape[0], ROW))
    scale, residual = np.empty((bins + 1, ROW)), np.empty((bins + 1, ROW))
    f, v = (
        np.empty((materials, materials, ROW)),
        np.empty((materials, materials, ROW)),
    )
    observed, observed_inverse = np.empty_like(f), np.empty_like(f)
    scored, newton = np.empty((materials, ROW)), np.empty((materials, ROW))
    along, decrement, straight = np.empty(ROW), np.empty(ROW), np.empty(ROW)
    regular = np.empty(ROW)
    u, a = np.empty((materials, ROW)), np.empty((materials, ROW))
    base, move = np.empty((materials, ROW)), np.empty((materials, ROW))
    sound, slope, last = np.empty(ROW), np.empty(ROW), np.empty(ROW)
    chi, share = np.empty(ROW), np.zeros(ROW)
    halved, steps = np.empty(ROW, np.int64), np.empty(ROW, np.int64)
    outcome = np.empty(ROW, np.int64)
    g = np.empty((materials, materials, materials, ROW))
    y, extra = np.empty_like(g), np.empty_like(f)
    for first in range(0, pixels, LANES):
        _load(first, counts, weight, dead_fraction, n, w, c, opened, outcome)
        if start.shape[0] == 0:
            regress(n, opened, residual, coefficients, a)
        for j in range(materials):
            for lane in range(LANES):
                if start.shape[0] > 0:
                    i = min(first + lane, start.shape[0] - 1, pixels - 1)
                    a[j, lane] = start[i, j]
                a[j, lane] = min(max(a[j, lane], lowest[j]), highest[j])
                base[j, lane] = 0.0
                move[j, lane] = a[j, lane]
        slope[:], last[:], halved[:], steps[:] = np.inf, 0.0, 0, 0
        moved = 1
        while moved > 0:
            expect(minus_attenuation, factor, a, w, t, p, moment)
            inform(moment, c, scale, sound, f)
            invert(f, v, sound)
            score(corrected, n, moment, scale, v, residual, u)
            observe(moment, scale, residual, observed)
            regular[:] = 1.0
            invert(observed, observed_inverse, regular)
            project(u, move, along)
            step(v, u, scored, decrement)
            step(observed_inverse, u, newton, straight)
            moved = _advance(
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
                a,
                base,
                move,
                slope,
                last,
                halved,
                steps,
                outcome,
            )
        if corrected:
            bend(moment, scale, v, g, y)
            inflate(f, v, y, extra, share)
        misfit(n, moment, scale, max(bins - materials, 1), chi)
        _store(
            first,
            n,
            base,
            move,
            v,
            chi,
            share,
            steps,
            outcome,
            areal_density,
            covariance,
            deviance,
            steps_out,
            outcome_out,
        )
