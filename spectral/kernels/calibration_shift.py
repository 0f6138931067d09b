"""Compiled shift of estimates by the errors of their pixels' departures.

Flat arrays in, ``out`` arrays filled; no validation. `spectral.decomposition.responses`
prepares the arguments; the NumPy twin stands in
`spectral.kernels.calibration_shift_numpy`.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from spectral.kernels.elementary import exponential
from spectral.kernels.pixel_likelihood import cubic_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Single = NDArray[np.float32]
    Weight = NDArray[np.float64] | NDArray[np.float32]


# Sums may be taken in any order, so that one instruction serves several nodes. All of
# it is one compiled function: a part compiled twice, alone and within another, could
# then give two roundings, and a resumed run other last digits than an undisturbed one.
ANY_ORDER = {"reassoc", "contract", "nsz"}


@njit(nogil=True, error_model="numpy", inline="always")
def _read(
    tables: Single,
    b: int,
    first: int,
    value: Single,
    slope: Single,
    kinds: Single,
    passed: Single,
    out: Array,
) -> None:
    """Read the curves of bin b at one level behind the object.

    out: the curves by rate, by variance and by dead time, then the slope with the
    level of the pixel's own curve, which is the sum of all four weighted by kinds.
    """
    v0, v1, v2, v3 = value[0], value[1], value[2], value[3]
    s0, s1, s2, s3 = slope[0], slope[1], slope[2], slope[3]
    second, third, fourth = first + 1, first + 2, first + 3
    a, c, d = kinds[1], kinds[2], kinds[3]
    rate = variance = dead = along = np.float32(0.0)
    # an unsigned index cannot count from the end: neighbours are read together
    for n in range(np.uint64(passed.shape[0])):
        total = s0 * tables[b, 0, first, n] + s1 * tables[b, 0, second, n]
        total += s2 * tables[b, 0, third, n] + s3 * tables[b, 0, fourth, n]
        r0, r1 = tables[b, 1, first, n], tables[b, 1, second, n]
        r2, r3 = tables[b, 1, third, n], tables[b, 1, fourth, n]
        rate += passed[n] * (v0 * r0 + v1 * r1 + v2 * r2 + v3 * r3)
        total += a * (s0 * r0 + s1 * r1 + s2 * r2 + s3 * r3)
        r0, r1 = tables[b, 2, first, n], tables[b, 2, second, n]
        r2, r3 = tables[b, 2, third, n], tables[b, 2, fourth, n]
        variance += passed[n] * (v0 * r0 + v1 * r1 + v2 * r2 + v3 * r3)
        total += c * (s0 * r0 + s1 * r1 + s2 * r2 + s3 * r3)
        r0, r1 = tables[b, 3, first, n], tables[b, 3, second, n]
        r2, r3 = tables[b, 3, third, n], tables[b, 3, fourth, n]
        dead += passed[n] * (v0 * r0 + v1 * r1 + v2 * r2 + v3 * r3)
        total += d * (s0 * r0 + s1 * r1 + s2 * r2 + s3 * r3)
        along += passed[n] * total
    out[0], out[1], out[2], out[3] = rate, variance, dead, along


@njit(nogil=True, error_model="numpy", inline="always")
def _expect(
    p: int,
    weight: Weight,
    attenuation: Array,
    passed: Array,
    counts: Array,
    slope: Array,
) -> None:
    """Counts of each bin behind the object and their slopes (bin, material).

    attenuation is (material, node) here.
    """
    for b in range(counts.shape[0]):
        total = 0.0
        for n in range(passed.shape[0]):
            total += weight[p, b, n] * passed[n]
        counts[b] = max(total, 1e-6)
        for m in range(attenuation.shape[0]):
            total = 0.0
            for n in range(passed.shape[0]):
                total += weight[p, b, n] * passed[n] * attenuation[m, n]
            slope[b, m] = -total


@njit(nogil=True, error_model="numpy", inline="always")
def _move(
    p: int,
    tables: Single,
    levels: Array,
    step: float,
    departures: Array,
    passed: Single,
    count_time: float,
    counts: Array,
    value: Single,
    slope: Single,
    kinds: Single,
    read: Array,
    moved: Array,
) -> None:
    """Change of each bin's counts with each departure (bin, parameter)."""
    size = departures.shape[1]
    kinds[1] = departures[p, 0]
    kinds[2] = departures[p, size - 2]
    kinds[3] = departures[p, size - 1]
    factor = count_time * math.exp(departures[p, 0])
    for b in range(counts.shape[0]):
        for i in range(size):
            moved[b, i] = 0.0
        moved[b, 0] = counts[b]
    for k in range(levels.shape[0]):
        level = levels[k] + departures[p, 1 + k]
        first = cubic_weights(level, step, tables.shape[2], value, slope)
        # a threshold is the lower end of its own bin and the upper end of the one below
        for b in range(max(k - 1, 0), k + 1):
            _read(tables, b, first, value, slope, kinds, passed, read)
            sign = factor if b == k else -factor
            moved[b, 0] += sign * read[0]
            moved[b, 1 + k] += sign * read[3]
            moved[b, size - 2] += sign * read[1]
            moved[b, size - 1] += sign * read[2]


@njit(nogil=True, error_model="numpy", inline="always")
def _variance(p: int, spread: NDArray[np.float32], vectors: Array, row: int) -> float:
    """Variance of a sum over the pixel's departures, weighted by a row of vectors."""
    total = 0.0
    for i in range(spread.shape[1]):
        inner = 0.0
        for j in range(spread.shape[1]):
            inner += spread[p, i, j] * vectors[row, j]
        total += inner * vectors[row, i]
    return total


@njit(nogil=True, cache=True, error_model="numpy", fastmath=ANY_ORDER)
def shifts(
    tables: Single,
    levels: Array,
    step: float,
    attenuation: Array,
    departures: Array,
    spread: NDArray[np.float32],
    weight: Weight,
    estimate: Array,
    covariance: Array,
    lost: float,
    count_time: float,
    errors: Array,
    extra: Array,
    seen: Array,
) -> None:
    """Fill the estimates' errors, the deviance's relative rise and expected counts.

    tables (bin, kind, grid, node), per second; levels (threshold,); attenuation
    (node, material); departures (pixel, parameter), spread (pixel, parameter,
    parameter); weight (pixel, bin, node) in counts, read from the same tables;
    estimate (pixel, material), covariance (pixel, material, material); errors
    (pixel, material), extra (pixel,), seen (pixel,), above the lowest threshold.
    """
    pixels, materials = estimate.shape
    bins, size = levels.shape[0], departures.shape[1]
    across = attenuation.T.copy()
    passed, counts = np.empty(attenuation.shape[0]), np.empty(bins)
    single = np.empty(attenuation.shape[0], np.float32)
    value, slope_by = np.empty(4, np.float32), np.empty(4, np.float32)
    kinds, read = np.ones(4, np.float32), np.empty(4)
    moved, slope = np.empty((bins, size)), np.empty((bins, materials))
    weighted = np.empty((bins, materials))
    gain, inner = np.empty((materials, size)), np.empty((materials, size))
    for p in range(pixels):
        for n in range(passed.shape[0]):
            path = 0.0
            for m in range(materials):
                path -= across[m, n] * estimate[p, m]
            passed[n] = exponential(path)
            single[n] = passed[n]
        _expect(p, weight, across, passed, counts, slope)
        _move(
            p,
            tables,
            levels,
            step,
            departures,
            single,
            count_time,
            counts,
            value,
            slope_by,
            kinds,
            read,
            moved,
        )
        total = 0.0
        for b in range(bins):
            total += counts[b]
        seen[p] = total
        boost = lost / max(1.0 - lost * total, 0.1)
        for m in range(materials):
            together = 0.0
            for b in range(bins):
                together += slope[b, m]
            for b in range(bins):
                weighted[b, m] = slope[b, m] / counts[b] + boost * together
            for i in range(size):
                inner[m, i] = 0.0
                for b in range(bins):
                    inner[m, i] += weighted[b, m] * moved[b, i]
        for m in range(materials):
            for i in range(size):
                gain[m, i] = 0.0
                for j in range(materials):
                    gain[m, i] += covariance[p, m, j] * inner[j, i]
            errors[p, m] = math.sqrt(max(_variance(p, spread, gain, m), 0.0))
        rise = 0.0
        for b in range(bins):  # moved turns into what the estimate leaves of it
            for m in range(materials):
                for i in range(size):
                    moved[b, i] -= slope[b, m] * gain[m, i]
            rise += _variance(p, spread, moved, b) / counts[b]
        extra[p] = rise / max(bins - materials, 1)
