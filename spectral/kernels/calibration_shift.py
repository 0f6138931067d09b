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

from spectral.kernels.pixel_likelihood import cubic_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]


@njit(nogil=True, cache=True, error_model="numpy")
def _moved_bins(
    tables: Array,
    levels: Array,
    step: float,
    departures: Array,
    passed: Array,
    moved: Array,
    counts: Array,
) -> None:
    """Counts of each bin, and their change with each departure (bin, parameter)."""
    size = departures.shape[0]
    bins = tables.shape[0]
    area = math.exp(departures[0])
    ln_area = departures[0]
    variance = departures[size - 2]
    ln_dead = departures[size - 1]
    value = np.empty(4)
    slope = np.empty(4)
    read = np.empty(4)
    moved[:] = 0.0
    counts[:] = 0.0
    for k in range(bins):
        level = levels[k] + departures[1 + k]
        first = cubic_weights(level, step, tables.shape[2], value, slope)
        # a threshold is the lower end of its own bin and the upper end of the one below
        for b in range(max(k - 1, 0), k + 1):
            sign = 1.0 if b == k else -1.0
            at = np.zeros(4)
            along = np.zeros(4)
            for q in range(4):
                for kind in range(4):
                    total = 0.0
                    for n in range(passed.shape[0]):
                        total += passed[n] * tables[b, kind, first + q, n]
                    read[kind] = total
                for kind in range(4):
                    at[kind] += value[q] * read[kind]
                    along[kind] += slope[q] * read[kind]
            above = area * (
                at[0] + ln_area * at[1] + variance * at[2] + ln_dead * at[3]
            )
            counts[b] += sign * above
            moved[b, 0] += sign * (above + area * at[1])
            moved[b, 1 + k] += (
                sign
                * area
                * (
                    along[0]
                    + ln_area * along[1]
                    + variance * along[2]
                    + ln_dead * along[3]
                )
            )
            moved[b, size - 2] += sign * area * at[2]
            moved[b, size - 1] += sign * area * at[3]


@njit(nogil=True, cache=True, error_model="numpy")
def shifts(
    tables: Array,
    levels: Array,
    step: float,
    attenuation: Array,
    departures: Array,
    spread: NDArray[np.float32],
    weight: Array,
    estimate: Array,
    covariance: Array,
    lost: float,
    count_time: float,
    errors: Array,
    extra: Array,
) -> None:
    """Fill the estimates' standard deviations and the deviance's relative rise.

    tables (bin, kind, grid, node), per second; levels (threshold,); attenuation
    (node, material); departures (pixel, parameter), spread (pixel, parameter,
    parameter); weight (pixel, bin, node) in counts; estimate (pixel, material),
    covariance (pixel, material, material); errors (pixel, material), extra (pixel,).
    """
    pixels, materials = estimate.shape
    bins = levels.shape[0]
    nodes = attenuation.shape[0]
    size = departures.shape[1]
    passed = np.empty(nodes)
    moved = np.empty((bins, size))
    counts = np.empty(bins)
    slope = np.empty((bins, materials))
    weighted = np.empty((bins, materials))
    gain = np.empty((materials, size))
    inner = np.empty((materials, size))
    rest = np.empty(size)
    for p in range(pixels):
        for n in range(nodes):
            path = 0.0
            for m in range(materials):
                path += attenuation[n, m] * estimate[p, m]
            passed[n] = math.exp(-path) * count_time
        _moved_bins(tables, levels, step, departures[p], passed, moved, counts)
        total = 0.0
        for b in range(bins):
            counts[b] = max(counts[b], 1e-6)
            total += counts[b]
            for m in range(materials):
                slope[b, m] = 0.0
            for n in range(nodes):
                x = weight[p, b, n] * passed[n] / count_time
                for m in range(materials):
                    slope[b, m] -= x * attenuation[n, m]
        boost = lost / max(1.0 - lost * total, 0.1)
        for m in range(materials):
            together = 0.0
            for b in range(bins):
                together += slope[b, m]
            for b in range(bins):
                weighted[b, m] = slope[b, m] / counts[b] + boost * together
        for m in range(materials):
            for i in range(size):
                x = 0.0
                for b in range(bins):
                    x += weighted[b, m] * moved[b, i]
                inner[m, i] = x
        for m in range(materials):
            for i in range(size):
                x = 0.0
                for j in range(materials):
                    x += covariance[p, m, j] * inner[j, i]
                gain[m, i] = x
        for m in range(materials):
            x = 0.0
            for i in range(size):
                for j in range(size):
                    x += gain[m, i] * spread[p, i, j] * gain[m, j]
            errors[p, m] = math.sqrt(max(x, 0.0))
        rise = 0.0
        for b in range(bins):
            for i in range(size):
                x = moved[b, i]
                for m in range(materials):
                    x -= slope[b, m] * gain[m, i]
                rest[i] = x
            x = 0.0
            for i in range(size):
                for j in range(size):
                    x += rest[i] * spread[p, i, j] * rest[j]
            rise += x / counts[b]
        extra[p] = rise / max(bins - materials, 1)
