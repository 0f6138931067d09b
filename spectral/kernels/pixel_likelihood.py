"""Compiled likelihood of a pixel's departures over all wedge exposures.

Flat arrays in, ``out`` arrays filled; no validation. `spectral.calibration.pixel_fit`
prepares the arguments; the NumPy twin stands in
`spectral.kernels.pixel_likelihood_numpy`.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Weights = NDArray[np.float64] | NDArray[np.float32]

LEAST = 1e-6


@njit(nogil=True, cache=True, error_model="numpy")
def cubic_weights(
    level: float, step: float, grid: int, value: Weights, slope: Weights
) -> int:
    """Lagrange's cubic through four grid points; the first point's index."""
    place = min(max(level / step, 1.0), grid - 2.001)
    first = int(place) - 1
    t = place - first - 1.0
    value[0] = -t * (t - 1.0) * (t - 2.0) / 6.0
    value[1] = (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0
    value[2] = -(t + 1.0) * t * (t - 2.0) / 2.0
    value[3] = (t + 1.0) * t * (t - 1.0) / 6.0
    slope[0] = -(3.0 * t * t - 6.0 * t + 2.0) / 6.0 / step
    slope[1] = (3.0 * t * t - 4.0 * t - 1.0) / 2.0 / step
    slope[2] = -(3.0 * t * t - 2.0 * t - 2.0) / 2.0 / step
    slope[3] = (3.0 * t * t - 1.0) / 6.0 / step
    return first


@njit(nogil=True, cache=True, error_model="numpy")
def summarise(
    counts: Array,
    curve: Array,
    by_rate: Array,
    by_variance: Array,
    by_dead: Array,
    levels: Array,
    step: float,
    values: Array,
    ratio: Array,
    lost: Array,
    time: Array,
    information: Array,
    score: Array,
    deviance: Array,
    total_expected: Array,
) -> None:
    """Fill information, score and deviance of each pixel; add up expected counts.

    counts (pixel, exposure, bin); curve and by_* (exposure, grid), per second;
    levels (threshold,); values (pixel, parameter); ratio (exposure, bin); lost and
    time (exposure,); information (pixel, parameter, parameter), score (pixel,
    parameter), deviance (pixel,), total_expected (exposure, bin), without ratio.
    """
    pixels, exposures, bins = counts.shape
    size = bins + 3
    grid = curve.shape[1]
    value = np.empty((bins, 4))
    slope = np.empty((bins, 4))
    first = np.empty(bins, np.int64)
    above = np.empty(bins + 1)
    change = np.zeros((bins + 1, 4))
    row = np.empty(size)
    together = np.empty(size)
    for p in range(pixels):
        ln_area = values[p, 0]
        area = math.exp(ln_area)
        variance = values[p, size - 2]
        ln_dead = values[p, size - 1]
        info = information[p]
        pull = score[p]
        info[:] = 0.0
        pull[:] = 0.0
        total_deviance = 0.0
        for k in range(bins):
            first[k] = cubic_weights(
                levels[k] + values[p, 1 + k], step, grid, value[k], slope[k]
            )
        for e in range(exposures):
            for k in range(bins):
                c = r = v = d = cs = rs = vs = ds = 0.0
                for q in range(4):
                    g = first[k] + q
                    w = value[k, q]
                    s = slope[k, q]
                    c += w * curve[e, g]
                    r += w * by_rate[e, g]
                    v += w * by_variance[e, g]
                    d += w * by_dead[e, g]
                    cs += s * curve[e, g]
                    rs += s * by_rate[e, g]
                    vs += s * by_variance[e, g]
                    ds += s * by_dead[e, g]
                scale = area * time[e]
                above[k] = scale * (c + ln_area * r + variance * v + ln_dead * d)
                change[k, 0] = above[k] + scale * r
                change[k, 1] = scale * (
                    cs + ln_area * rs + variance * vs + ln_dead * ds
                )
                change[k, 2] = scale * v
                change[k, 3] = scale * d
            above[bins] = 0.0
            change[bins, :] = 0.0
            together[:] = 0.0
            left_sum = 0.0
            expected_sum = 0.0
            for b in range(bins):
                plain = max(above[b] - above[b + 1], LEAST)
                total_expected[e, b] += plain
                factor = ratio[e, b]
                expected = plain * factor
                row[:] = 0.0
                row[0] = (change[b, 0] - change[b + 1, 0]) * factor
                row[1 + b] = change[b, 1] * factor
                if b + 1 < bins:
                    row[2 + b] = -change[b + 1, 1] * factor
                row[size - 2] = (change[b, 2] - change[b + 1, 2]) * factor
                row[size - 1] = (change[b, 3] - change[b + 1, 3]) * factor
                n = counts[p, e, b]
                left = n - expected
                left_sum += left
                expected_sum += expected
                total_deviance -= 2.0 * left
                if n > 0.0:
                    total_deviance += 2.0 * n * math.log(n / expected)
                inverse = 1.0 / expected
                for i in range(size):
                    together[i] += row[i]
                    if row[i] == 0.0:
                        continue
                    x = row[i] * inverse
                    pull[i] += x * left
                    for j in range(i, size):
                        info[i, j] += x * row[j]
            boost = lost[e] / max(1.0 - lost[e] * expected_sum, 0.1)
            total_deviance += boost * left_sum * left_sum
            for i in range(size):
                x = together[i] * boost
                pull[i] += x * left_sum
                for j in range(i, size):
                    info[i, j] += x * together[j]
        for i in range(size):
            for j in range(i):
                info[i, j] = info[j, i]
        deviance[p] = total_deviance / (exposures * bins)


@njit(nogil=True, cache=True, error_model="numpy")
def add_expected(
    curve: Array,
    by_rate: Array,
    by_variance: Array,
    by_dead: Array,
    levels: Array,
    step: float,
    values: Array,
    time: Array,
    total_expected: Array,
) -> None:
    """Add up the expected counts of `summarise`, bit by bit, and nothing else."""
    pixels = values.shape[0]
    exposures, bins = total_expected.shape
    size = bins + 3
    grid = curve.shape[1]
    value = np.empty((bins, 4))
    slope = np.empty(4)
    first = np.empty(bins, np.int64)
    for p in range(pixels):
        ln_area = values[p, 0]
        area = math.exp(ln_area)
        variance = values[p, size - 2]
        ln_dead = values[p, size - 1]
        for k in range(bins):
            first[k] = cubic_weights(
                levels[k] + values[p, 1 + k], step, grid, value[k], slope
            )
        for e in range(exposures):
            scale = area * time[e]
            higher = 0.0
            for k in range(bins - 1, -1, -1):
                c = r = v = d = 0.0
                for q in range(4):
                    g = first[k] + q
                    w = value[k, q]
                    c += w * curve[e, g]
                    r += w * by_rate[e, g]
                    v += w * by_variance[e, g]
                    d += w * by_dead[e, g]
                above = scale * (c + ln_area * r + variance * v + ln_dead * d)
                total_expected[e, k] += max(above - higher, LEAST)
                higher = above
