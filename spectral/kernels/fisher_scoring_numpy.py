"""The twin of `fisher_scoring` in plain NumPy: same steps, same results, slow.

Arrays start with the pixel axis: moment[pixel, row, q], rows as in `pixel_lanes` (the
last one holds the sum over the bins, weighted by the dead time's share of C^-1).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.kernels.curvature import LARGEST_INFLATION
from spectral.kernels.pixel_lanes import SMALLEST_PIVOT
from spectral.kernels.step_control import (
    CONVERGED,
    FADING,
    FEW_COUNTS,
    HALVINGS,
    NEAR,
    RUNNING,
    SINGULAR,
    SLOWEST,
    STEPS_SPENT,
    UNUSABLE,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Mask = NDArray[np.bool_]

_TINY, _HUGE = 1e-30, 1e30


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Point:
    """All that is known at one point: pixel axis first."""

    sound: Mask
    moment: Array
    scale: Array
    information: Array
    inverse: Array
    score: Array
    move: Array
    straight: Array
    regular: Mask
    ahead: Array
    further: Array
    further_straight: Array
    blur: Array
    bias: Array


def _full(triangle: Array, materials: int) -> Array:
    """Symmetric matrices from their upper triangles, row by row."""
    row, column = np.triu_indices(materials)
    matrix = np.empty((*triangle.shape[:-1], materials, materials))
    matrix[..., row, column] = triangle
    matrix[..., column, row] = triangle
    return matrix


def _invert(matrix: Array) -> tuple[Array, Mask]:
    """Inverse by Gauss-Jordan elimination, and where every pivot was large enough."""
    v = matrix.copy()
    good = np.ones(len(v), np.bool_)
    diagonal = np.einsum("pjj->pj", matrix)
    for k in range(matrix.shape[-1]):
        pivot = v[:, k, k].copy()
        good &= pivot > SMALLEST_PIVOT * diagonal[:, k]
        column = v[:, :, k] / pivot[:, None]
        row = v[:, k, :].copy()
        v -= column[:, :, None] * row[:, None, :]
        v[:, :, k] = column
        v[:, k, :] = -row / pivot[:, None]
        v[:, k, k] = 1.0 / pivot
    return v, good


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Problem:
    """What is given, one row a pixel."""

    counts: Array
    weight: Array
    minus: Array
    factor: Array
    dead: Array
    corrected: bool

    def at(self, a: Array, which: NDArray[np.intp]) -> _Point:
        """Expectation, information, score and Newton's matrix at a[pixel, material]."""
        m = self.minus.shape[1]
        a, dead = a[which], self.dead[which]
        transmission = np.exp(np.clip(a @ self.minus.T, -700.0, 700.0))
        moment = (self.weight[which] * transmission[:, None, :]) @ self.factor.T
        moment = np.concatenate((moment, moment.sum(axis=1, keepdims=True)), axis=1)
        expected = moment[:, :, 0]
        scale = _scales(expected, dead)
        sound = (expected[:, :-1] > _TINY).all(axis=1)
        sound &= dead * expected[:, -1] < 1.0
        sound &= expected[:, -1] < _HUGE
        first = moment[:, :, 1 : 1 + m]
        information = np.einsum("pbj,pbi,pb->pji", first, first, scale)
        inverse, good = _invert(information)
        second = _full(moment[:, :, 1 + m :], m)
        pseudo, residual = np.zeros_like(scale), np.zeros_like(scale)
        if self.corrected:
            pseudo[:, :-1] = 0.5 * np.einsum("pji,pbji->pb", inverse, second[:, :-1])
        residual[:, :-1] = self.counts[which] - expected[:, :-1] + pseudo[:, :-1]
        residual[:, -1] = residual[:, :-1].sum(axis=1)
        pseudo[:, -1] = pseudo[:, :-1].sum(axis=1)
        pull = residual * scale
        pulled = pull * scale
        pulled[:, -1] *= -1.0
        observed = np.einsum("pbj,pbi,pb->pji", first, first, scale + pulled)
        observed -= np.einsum("pbji,pb->pji", second, pull)
        newton, regular = _invert(observed)
        score = np.einsum("pbj,pb->pj", first, pull)
        turn = np.einsum("pbj,pb->pj", first, pseudo * scale)
        move = np.einsum("pji,pi->pj", newton, score)
        ahead, further = _look_ahead(
            expected, first, second, dead, residual, move, newton
        )
        return _Point(
            sound=sound & good,
            moment=moment,
            scale=scale,
            information=information,
            inverse=inverse,
            score=score,
            move=move,
            straight=np.einsum("pj,pj->p", move, score),
            regular=regular,
            ahead=ahead,
            further=further[0],
            further_straight=further[1],
            blur=further[2],
            bias=np.einsum("pj,pji,pi->p", turn, inverse, turn),
        )

    def settled(self, a: Array, which: NDArray[np.intp], looked: Mask) -> _Point:
        """What is known at a, with the moments ahead where the last step used them."""
        at = self.at(a, which)
        m = self.minus.shape[1]
        moment = at.moment.copy()
        moment[looked, :, : 1 + m] = at.ahead[looked]
        scale = _scales(moment[:, :, 0], self.dead[which])
        first = moment[:, :, 1 : 1 + m]
        information = np.einsum("pbj,pbi,pb->pji", first, first, scale)
        return replace(
            at,
            moment=moment,
            scale=scale,
            information=information,
            inverse=_invert(information)[0],
        )


def _scales(expected: Array, dead: Array) -> Array:
    """Weights of the rows in products with C^-1."""
    scale = 1.0 / expected
    scale[:, -1] = dead / (1.0 - dead * expected[:, -1])
    return scale


def _look_ahead(
    expected: Array,
    first: Array,
    second: Array,
    dead: Array,
    residual: Array,
    move: Array,
    newton: Array,
) -> tuple[Array, tuple[Array, Array, Array]]:
    """Moments after a move by the Taylor series; step from there, its length, blur."""
    turn = np.einsum("pbji,pi->pbj", second, move)
    there = expected + np.einsum("pbj,pj->pb", first + 0.5 * turn, move)
    slope = first + turn
    scale = _scales(there, dead)
    cannot = there <= 0.0
    cannot[:, -1] = dead * there[:, -1] >= 1.0
    scale[cannot] = np.nan
    left = (residual - there + expected) * scale
    score = np.einsum("pbj,pb->pj", slope, left)
    further = np.einsum("pji,pi->pj", newton, score)
    ahead = np.concatenate((there[:, :, None], slope), axis=2)
    here = expected[:, :-1]
    x = there[:, :-1] / here - 1.0
    blur = 0.25 * x**4 * (x**2 * here / 9.0 + residual[:, :-1] ** 2 / here)
    straight = np.einsum("pj,pj->p", further, score)
    return ahead, (further, straight, blur.sum(axis=1))


def _start(
    counts: Array, weight: Array, start: Array, coefficients: Array, bounds: Array
) -> Array:
    """Start values: those given, or the regression's, held within bounds."""
    if len(start):
        a = np.broadcast_to(start, (len(counts), start.shape[1]))
    else:
        x = np.log(np.clip((counts + 0.5) / weight.sum(axis=2), 1e-30, 1e30))
        row, column = np.triu_indices(x.shape[1])
        one = np.ones((len(x), 1))
        a = np.hstack((one, x, x[:, row] * x[:, column])) @ coefficients
    return np.clip(a, bounds[0], bounds[1])


def _hold_back(a: Array, u: Array, v: Array) -> tuple[Array, float]:
    """Step of one pixel that leaves no material below 0, and its decrement."""
    free = v.copy()
    push = u
    for _ in range(len(a) + 1):
        for k in np.flatnonzero((a <= 0.0) & (push < 0.0)):
            if free[k, k] > 0.0:
                free -= np.outer(free[:, k], free[:, k]) / free[k, k]
                free[k, :] = free[:, k] = 0.0
        push = free @ u
    move = push
    reach, first = 1.0, -1
    for j in range(len(a)):
        if a[j] + reach * move[j] < 0.0:
            reach, first = -a[j] / move[j], j
    step = reach * move
    if first >= 0:
        step[first] = -a[first]
    return step, float(u @ move)


def _next_step(
    a: Array, at: _Point, last: Array, nonnegative: bool
) -> tuple[Array, Array, Array, Mask]:
    """Step, decrement, what will be left of it, and whether it was looked ahead."""
    move = np.einsum("pji,pi->pj", at.inverse, at.score)
    decrement = np.einsum("pj,pj->p", move, at.score)
    if nonnegative:
        for p in range(len(a)):
            move[p], decrement[p] = _hold_back(a[p], at.score[p], at.inverse[p])
    factor = np.minimum(np.sqrt(np.maximum(decrement, 0.0) / last), SLOWEST)
    left = decrement * np.where(last > 0.0, (factor / (1.0 - factor)) ** 2, 1.0)
    near = (decrement < NEAR) & at.regular & (not nonnegative)
    near &= (at.straight > 0.0) & (at.straight < 4.0 * decrement)
    move[near] = at.move[near]
    looked = near & (at.further_straight >= 0.0)
    looked &= at.further_straight < 0.25 * at.straight
    move[looked] += at.further[looked]
    after = at.further_straight**2 / at.straight + FADING * at.bias**2 * at.straight
    left[looked] = (after + at.blur)[looked]
    return move, decrement, left, looked


def _curved_covariance(at: _Point, m: int) -> tuple[Array, Array]:
    """Covariance with the curvature's share added, and that share."""
    first, second = at.moment[:, :, 1 : 1 + m], _full(at.moment[:, :, 1 + m :], m)
    bend = np.einsum("pbe,pbkj,pb->pekj", first, second, at.scale)
    bend = np.einsum("pie,pekj,pjl->pikl", at.inverse, bend, at.inverse)
    extra = 0.5 * np.einsum("pjke,piek->pji", bend, bend)
    share = np.einsum("pji,pji->p", extra, at.information) / m
    cut = np.minimum(1.0, LARGEST_INFLATION / np.maximum(share, 1e-30))
    return at.inverse + cut[:, None, None] * extra, share


def _deviance(counts: Array, at: _Point, dof: float) -> Array:
    """Deviance per degree of freedom."""
    expected = at.moment[:, :-1, 0]
    ratio = np.clip(np.maximum(counts, 1e-30) / expected, 1e-300, 1e300)
    chi = 2.0 * (counts * np.log(ratio) - counts + expected).sum(axis=1)
    excess = (counts - expected).sum(axis=1)
    return np.asarray((chi + at.scale[:, -1] * excess**2) / dof)


def _pose(
    counts: Array,
    weight: Array,
    minus: Array,
    factor: Array,
    dead: Array,
    corrected: bool,
) -> _Problem:
    """Every pixel with weights and dead fraction of its own."""
    pad, m = len(minus) - weight.shape[2], minus.shape[1]
    weight = np.pad(weight, ((0, 0), (0, 0), (0, pad)))
    return _Problem(
        counts=counts,
        weight=np.broadcast_to(weight, (len(counts), *weight.shape[1:])),
        minus=minus,
        factor=factor[: 1 + m + m * (m + 1) // 2],
        dead=np.broadcast_to(dead, len(counts)),
        corrected=corrected,
    )


def _usable(problem: _Problem) -> Mask:
    """Pixels whose counts, weights and dead fraction can be."""
    opened = problem.weight.sum(axis=2)
    usable = ((problem.counts >= 0.0) & (problem.counts < _HUGE)).all(axis=1)
    usable &= ((opened > 0.0) & (opened < _HUGE)).all(axis=1)
    return np.asarray(usable & (problem.dead >= 0.0))


def _walk(
    problem: _Problem,
    a: Array,
    nonnegative: bool,
    max_steps: int,
    tolerance: float,
    steps: NDArray[np.int64],
    outcome: NDArray[np.int64],
) -> tuple[Array, Array, Mask]:
    """Last good points, the steps to be added to them, and which looked ahead."""
    base, move = np.zeros_like(a), a.copy()
    slope, last = np.full(len(a), np.inf), np.zeros(len(a))
    halved, looked = np.zeros(len(a), np.int64), np.zeros(len(a), np.bool_)
    todo = np.flatnonzero(outcome == RUNNING)
    while len(todo):
        outcome[todo[steps[todo] >= max_steps]] = STEPS_SPENT
        todo = todo[steps[todo] < max_steps]
        at = problem.at(a, todo)
        steps[todo] += 1
        spent = steps[todo] >= max_steps
        along = np.einsum("pj,pj->p", at.score, move[todo])
        good = at.sound & (along >= -slope[todo])
        back = ~good & (halved[todo] < HALVINGS)
        kept = ~back & at.sound
        step, decrement, left, ahead = _next_step(a[todo], at, last[todo], nonnegative)
        done = kept & (left <= tolerance)
        looked[todo] = done & ahead
        stop = kept & ~done & spent
        outcome[todo[stop]] = STEPS_SPENT
        outcome[todo[~back & ~at.sound]] = SINGULAR
        outcome[todo[done]] = CONVERGED
        rejected, accepted = todo[back], todo[kept]
        halved[rejected] += 1
        slope[rejected] *= 0.5
        move[rejected] *= np.where(spent[back], 0.0, 0.5)[:, None]
        base[accepted], halved[accepted] = a[accepted], 0
        last[accepted] = slope[accepted] = decrement[kept]
        move[accepted] = step[kept]
        move[todo[stop]] = 0.0
        todo = todo[outcome[todo] == RUNNING]
        a[todo] = base[todo] + move[todo]
    return base, move, looked


def fit_pixels(
    counts: Array,
    weight: Array,
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
    steps_out: NDArray[np.int64],
    outcome_out: NDArray[np.int64],
) -> None:
    """Fit all pixels and fill the last five arrays: see `fisher_scoring.fit_pixels`."""
    problem = _pose(counts, weight, minus_attenuation, factor, dead_fraction, corrected)
    usable = _usable(problem)
    areal_density[:], covariance[:], deviance[:] = np.nan, np.nan, np.nan
    steps_out[:], outcome_out[:] = 0, np.where(usable, RUNNING, UNUSABLE)
    todo = np.flatnonzero(usable)
    a = np.zeros_like(areal_density)
    with np.errstate(all="ignore"):
        a[todo] = _start(
            counts[todo],
            problem.weight[todo],
            start if len(start) < 2 else start[todo],
            coefficients,
            np.stack((lowest, highest)),
        )
        base, move, looked = _walk(
            problem, a, nonnegative, max_steps, tolerance, steps_out, outcome_out
        )
        found = np.flatnonzero(
            (outcome_out == CONVERGED) | (outcome_out == STEPS_SPENT)
        )
        at = problem.settled(base, found, looked[found])
        m = base.shape[1]
        matrix, share = at.inverse, np.zeros(len(found))
        if corrected:
            matrix, share = _curved_covariance(at, m)
        row, column = np.triu_indices(m)
        areal_density[found] = base[found] + move[found]
        covariance[found] = matrix[:, row, column]
        deviance[found] = _deviance(counts[found], at, max(counts.shape[1] - m, 1))
        few = ((counts[found] > 0.0).sum(axis=1) < m) | (share > LARGEST_INFLATION)
        outcome_out[found[few]] = FEW_COUNTS
