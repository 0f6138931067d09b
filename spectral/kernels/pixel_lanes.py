"""Expectation, information and score of a block of pixels, side by side.

Every inner loop runs over `LANES` pixels, so that one instruction serves several.
Arrays end in the lane axis: counts n[b, l], weights w[b, k, l], moments
moment[b, q, l] with q = expected counts, first derivatives, second derivatives (upper
triangle, row by row), all in single or all in double precision. A last row b = B holds the sum over the bins; with
scale[b] = 1 / lambda_b and scale[B] = c / (1 - c sum lambda), x' C^-1 y is
sum_b x_b y_b scale_b over all B + 1 rows, for the covariance of the counts
C = diag(lambda) - c lambda lambda'.

Source: that inverse is Sherman & Morrison 1950, Ann. Math. Stat. 21:124.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from spectral.kernels.elementary import exponential, logarithm, multiply_add

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

# A multiple of all vector lengths: no pixel is left to a loop of another rounding.
LANES = 128
# 9 cache lines of 64 bytes in single precision: rows spread over all cache sets.
ROW = 144
MOMENTS = 6  # computed in one pass: all of two materials
# Of the diagonal: a share of information not to be told from 0, in either precision.
SMALLEST_PIVOT = 1e-13
SMALLEST_SINGLE_PIVOT = 3e-6
NEAR = 0.1  # x of `misfit` below which its series has all digits
_TINY = 1e-30
_HUGE = 1e30


@njit(nogil=True, cache=True, error_model="numpy")
def regress(n: Array, opened: Array, x: Array, coefficients: Array, a: Array) -> None:
    """Start values: quadratic polynomial in ln((N + 1/2) / open counts)."""
    bins, real = n.shape[0], n.dtype.type
    half, low, high = real(0.5), real(_TINY), real(_HUGE)
    for b in range(bins):
        for lane in range(LANES):
            ratio = (n[b, lane] + half) / opened[b, lane]
            x[b, lane] = logarithm(min(max(ratio, low), high))
    for j in range(a.shape[0]):
        for lane in range(LANES):
            a[j, lane] = coefficients[0, j]
        f = 1 + bins
        for b in range(bins):
            linear = coefficients[1 + b, j]
            for lane in range(LANES):
                a[j, lane] += linear * x[b, lane]
            for other in range(b, bins):
                square = coefficients[f, j]
                f += 1
                for lane in range(LANES):
                    a[j, lane] += square * x[b, lane] * x[other, lane]


@njit(nogil=True, cache=True, error_model="numpy", inline="always")
def transmit(minus: Array, a: Array, t: Array) -> None:
    """Transmission of each node, exp(minus a) with minus = -M."""
    nodes, materials = minus.shape
    for k in range(nodes):
        for lane in range(LANES):
            t[k, lane] = minus[k, 0] * a[0, lane]
        for j in range(1, materials):
            for lane in range(LANES):
                t[k, lane] += minus[k, j] * a[j, lane]
        for lane in range(LANES):
            t[k, lane] = exponential(t[k, lane])


@njit(nogil=True, cache=True, error_model="numpy")
def _four(factor: Array, q: int, k: int) -> tuple[float, float, float, float]:
    """Return four neighbours of a row."""
    return factor[q, k], factor[q, k + 1], factor[q, k + 2], factor[q, k + 3]


@njit(nogil=True, cache=True, error_model="numpy", inline="always")
def expect(factor: Array, w: Array, t: Array, moment: Array) -> None:
    """Moments of w t: `MOMENTS` factors by 4 nodes at a time, held in registers."""
    bins, nodes = w.shape[0], w.shape[1]
    for q in range(factor.shape[0]):
        for lane in range(LANES):
            moment[bins, q, lane] = 0.0
    for b in range(bins):
        for q in range(0, factor.shape[0], MOMENTS):
            for i in range(MOMENTS):
                for lane in range(LANES):
                    moment[b, q + i, lane] = 0.0
            for k in range(0, nodes, 4):
                a0, a1, a2, a3 = _four(factor, q, k)
                b0, b1, b2, b3 = _four(factor, q + 1, k)
                c0, c1, c2, c3 = _four(factor, q + 2, k)
                d0, d1, d2, d3 = _four(factor, q + 3, k)
                e0, e1, e2, e3 = _four(factor, q + 4, k)
                f0, f1, f2, f3 = _four(factor, q + 5, k)
                for lane in range(LANES):
                    p0, p1 = (
                        w[b, k, lane] * t[k, lane],
                        w[b, k + 1, lane] * t[k + 1, lane],
                    )
                    p2, p3 = (
                        w[b, k + 2, lane] * t[k + 2, lane],
                        w[b, k + 3, lane] * t[k + 3, lane],
                    )
                    total = multiply_add(
                        a1, p1, multiply_add(a0, p0, moment[b, q, lane])
                    )
                    moment[b, q, lane] = multiply_add(
                        a3, p3, multiply_add(a2, p2, total)
                    )
                    total = multiply_add(
                        b1, p1, multiply_add(b0, p0, moment[b, q + 1, lane])
                    )
                    moment[b, q + 1, lane] = multiply_add(
                        b3, p3, multiply_add(b2, p2, total)
                    )
                    total = multiply_add(
                        c1, p1, multiply_add(c0, p0, moment[b, q + 2, lane])
                    )
                    moment[b, q + 2, lane] = multiply_add(
                        c3, p3, multiply_add(c2, p2, total)
                    )
                    total = multiply_add(
                        d1, p1, multiply_add(d0, p0, moment[b, q + 3, lane])
                    )
                    moment[b, q + 3, lane] = multiply_add(
                        d3, p3, multiply_add(d2, p2, total)
                    )
                    total = multiply_add(
                        e1, p1, multiply_add(e0, p0, moment[b, q + 4, lane])
                    )
                    moment[b, q + 4, lane] = multiply_add(
                        e3, p3, multiply_add(e2, p2, total)
                    )
                    total = multiply_add(
                        f1, p1, multiply_add(f0, p0, moment[b, q + 5, lane])
                    )
                    moment[b, q + 5, lane] = multiply_add(
                        f3, p3, multiply_add(f2, p2, total)
                    )
            for i in range(MOMENTS):
                for lane in range(LANES):
                    moment[bins, q + i, lane] += moment[b, q + i, lane]


@njit(nogil=True, cache=True, error_model="numpy")
def inform(moment: Array, c: Array, scale: Array, sound: Array, f: Array) -> None:
    """Fisher information f[j, i]; sound[l] is 0 where lambda or C cannot be."""
    rows, materials, one = scale.shape[0], f.shape[0], f.dtype.type(1.0)
    tiny, huge = f.dtype.type(_TINY), f.dtype.type(_HUGE)
    for lane in range(LANES):
        live = one - c[lane] * moment[rows - 1, 0, lane]
        good = live > 0.0 and moment[rows - 1, 0, lane] < huge
        sound[lane] = 1.0 if good else 0.0
        scale[rows - 1, lane] = c[lane] / live
    for b in range(rows - 1):
        for lane in range(LANES):
            sound[lane] = sound[lane] if moment[b, 0, lane] > tiny else 0.0
            scale[b, lane] = one / moment[b, 0, lane]
    for j in range(materials):
        for i in range(j, materials):
            for lane in range(LANES):
                f[j, i, lane] = 0.0
            for b in range(rows):
                for lane in range(LANES):
                    product = moment[b, 1 + j, lane] * moment[b, 1 + i, lane]
                    f[j, i, lane] += product * scale[b, lane]
            for lane in range(LANES):
                f[i, j, lane] = f[j, i, lane]


@njit(nogil=True, cache=True, error_model="numpy")
def invert(f: Array, v: Array, sound: Array) -> None:
    """Inverse v of f by Gauss-Jordan elimination; sound[l] turns 0 where f is singular."""
    materials, one = f.shape[0], f.dtype.type(1.0)
    smallest = f.dtype.type(SMALLEST_PIVOT if f.itemsize > 4 else SMALLEST_SINGLE_PIVOT)
    for j in range(materials):
        for i in range(materials):
            for lane in range(LANES):
                v[j, i, lane] = f[j, i, lane]
    for k in range(materials):
        for lane in range(LANES):
            pivot = v[k, k, lane]
            good = pivot > smallest * f[k, k, lane]
            sound[lane] = sound[lane] if good else 0.0
            v[k, k, lane] = one / pivot
        for j in range(materials):
            if j != k:
                for lane in range(LANES):
                    v[j, k, lane] *= v[k, k, lane]
                for i in range(materials):
                    if i != k:
                        for lane in range(LANES):
                            v[j, i, lane] -= v[j, k, lane] * v[k, i, lane]
        for i in range(materials):
            if i != k:
                for lane in range(LANES):
                    v[k, i, lane] *= -v[k, k, lane]


@njit(nogil=True, cache=True, error_model="numpy")
def compare(
    corrected: bool,
    n: Array,
    moment: Array,
    scale: Array,
    v: Array,
    pseudo: Array,
    residual: Array,
) -> None:
    """Residuals with the pseudo-counts q / 2, which are 0 if not corrected."""
    rows, materials, real = scale.shape[0], v.shape[0], v.dtype.type
    for lane in range(LANES):
        residual[rows - 1, lane] = pseudo[rows - 1, lane] = 0.0
    for b in range(rows - 1):
        for lane in range(LANES):
            pseudo[b, lane] = 0.0
        if corrected:
            q = 1 + materials
            for j in range(materials):
                for i in range(j, materials):
                    share = real(0.5 if i == j else 1.0)
                    for lane in range(LANES):
                        pseudo[b, lane] += share * v[j, i, lane] * moment[b, q, lane]
                    q += 1
        for lane in range(LANES):
            residual[b, lane] = n[b, lane] - moment[b, 0, lane] + pseudo[b, lane]
            residual[rows - 1, lane] += residual[b, lane]
            pseudo[rows - 1, lane] += pseudo[b, lane]


@njit(nogil=True, cache=True, error_model="numpy")
def score(moment: Array, scale: Array, residual: Array, u: Array) -> None:
    """Quasi-score u = D' C^-1 residual."""
    for j in range(u.shape[0]):
        for lane in range(LANES):
            u[j, lane] = 0.0
        for b in range(scale.shape[0]):
            for lane in range(LANES):
                product = moment[b, 1 + j, lane] * residual[b, lane]
                u[j, lane] += product * scale[b, lane]


@njit(nogil=True, cache=True, error_model="numpy")
def look_ahead(
    moment: Array,
    c: Array,
    scale: Array,
    residual: Array,
    move: Array,
    ahead: Array,
    ahead_scale: Array,
    ahead_residual: Array,
    blur: Array,
) -> None:
    """Moments, scales and residuals after a move, from the Taylor series here.

    With x the relative change of an expectation, the series leaves about x^3 / 6 of it
    and x^2 / 2 of its derivatives; blur is what that makes of chi-square.
    """
    rows, materials, real = ahead_scale.shape[0], move.shape[0], move.dtype.type
    one, none, quarter, ninth = real(1.0), real(np.nan), real(0.25), real(1.0 / 9.0)
    for lane in range(LANES):
        blur[lane] = 0.0
    for b in range(rows):
        for lane in range(LANES):
            ahead[b, 0, lane] = moment[b, 0, lane]
        q = 1 + materials
        for j in range(materials):
            for lane in range(LANES):
                ahead[b, 1 + j, lane] = moment[b, 1 + j, lane]
                ahead[b, 0, lane] += moment[b, 1 + j, lane] * move[j, lane]
        for j in range(materials):
            for i in range(j, materials):
                share = real(0.5 if i == j else 1.0)
                for lane in range(LANES):
                    turn = moment[b, q, lane] * move[i, lane]
                    ahead[b, 1 + j, lane] += turn
                    ahead[b, 0, lane] += share * turn * move[j, lane]
                if i > j:
                    for lane in range(LANES):
                        ahead[b, 1 + i, lane] += moment[b, q, lane] * move[j, lane]
                q += 1
        for lane in range(LANES):
            expected = ahead[b, 0, lane]
            ahead_residual[b, lane] = residual[b, lane] - expected + moment[b, 0, lane]
            live = one - c[lane] * expected
            last = c[lane] / live if live > 0.0 else none
            first = one / expected if expected > 0.0 else none
            ahead_scale[b, lane] = last if b == rows - 1 else first
        if b < rows - 1:
            for lane in range(LANES):
                x = (ahead[b, 0, lane] - moment[b, 0, lane]) * scale[b, lane]
                pull = residual[b, lane] * residual[b, lane] * scale[b, lane]
                curve = x * x * moment[b, 0, lane] * ninth + pull
                blur[lane] += quarter * x * x * x * x * curve


@njit(nogil=True, cache=True, error_model="numpy")
def observe(moment: Array, scale: Array, residual: Array, observed: Array) -> None:
    """Observed information: minus the slope of the score, q held."""
    rows, materials, real = scale.shape[0], observed.shape[0], scale.dtype.type
    one, q = real(1.0), 1 + materials
    for j in range(materials):
        for i in range(j, materials):
            for lane in range(LANES):
                observed[j, i, lane] = 0.0
            for b in range(rows):
                sign = real(1.0 if b < rows - 1 else -1.0)
                for lane in range(LANES):
                    first = moment[b, 1 + j, lane] * moment[b, 1 + i, lane]
                    pull = residual[b, lane] * scale[b, lane]
                    slope = first * (one + sign * pull) * scale[b, lane]
                    observed[j, i, lane] += slope - moment[b, q, lane] * pull
            for lane in range(LANES):
                observed[i, j, lane] = observed[j, i, lane]
            q += 1


@njit(nogil=True, cache=True, error_model="numpy")
def project(u: Array, move: Array, along: Array) -> None:
    """Slope of the likelihood along a move."""
    for lane in range(LANES):
        along[lane] = 0.0
    for j in range(u.shape[0]):
        for lane in range(LANES):
            along[lane] += u[j, lane] * move[j, lane]


@njit(nogil=True, cache=True, error_model="numpy")
def step(v: Array, u: Array, move: Array, decrement: Array) -> None:
    """Step v u and the squared length u' v u of it, in standard errors."""
    materials = u.shape[0]
    for j in range(materials):
        for lane in range(LANES):
            move[j, lane] = v[j, 0, lane] * u[0, lane]
        for i in range(1, materials):
            for lane in range(LANES):
                move[j, lane] += v[j, i, lane] * u[i, lane]
    project(u, move, decrement)


@njit(nogil=True, cache=True, error_model="numpy")
def settle(looked: Array, ahead: Array, moment: Array) -> None:
    """Take the moments ahead where the last step went by them."""
    for b in range(ahead.shape[0]):
        for q in range(ahead.shape[1]):
            for lane in range(LANES):
                here = moment[b, q, lane]
                moment[b, q, lane] = ahead[b, q, lane] if looked[lane] > 0.0 else here


@njit(nogil=True, cache=True, error_model="numpy")
def misfit(n: Array, moment: Array, scale: Array, dof: float, chi: Array) -> None:
    """Deviance per degree of freedom, with the dead time's share of C^-1.

    Near the expectation the logarithm is the series of its own argument, 2 artanh(x)
    with x = (n - lambda) / (n + lambda): n ln(n / lambda) and n - lambda then differ
    by more than rounding.
    """
    rows, real = scale.shape[0], chi.dtype.type
    two, low, high, near = real(2.0), real(_TINY), real(_HUGE), real(NEAR)
    part = real(1.0 / dof)
    c3, c5, c7, c9 = real(1 / 3), real(1 / 5), real(1 / 7), real(1 / 9)
    c1, c11, c13 = real(1.0), real(1 / 11), real(1 / 13)
    for lane in range(LANES):  # counts in excess of the expectation, then their share
        chi[lane] = -moment[rows - 1, 0, lane]
    for b in range(rows - 1):
        for lane in range(LANES):
            chi[lane] += n[b, lane]
    for lane in range(LANES):
        chi[lane] *= scale[rows - 1, lane] * chi[lane]
    for b in range(rows - 1):
        for lane in range(LANES):
            count, expected = n[b, lane], moment[b, 0, lane]
            x = (count - expected) / (count + expected)
            z = x * x
            series = multiply_add(z, c13, c11)
            series = multiply_add(z, series, c9)
            series = multiply_add(z, series, c7)
            series = multiply_add(z, series, c5)
            series = multiply_add(z, series, c3)
            series = two * x * multiply_add(z, series, c1)
            far = logarithm(min(max(count / expected, low), high))
            ratio = series if abs(x) < near else far
            chi[lane] += two * (count * ratio - (count - expected))
    for lane in range(LANES):
        chi[lane] *= part
