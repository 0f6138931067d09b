"""Compiled node weights of pixels: what each pixel expects of each node, in counts.

Flat arrays in, ``weight`` filled; no validation. `spectral.decomposition.responses`
prepares the arguments; `spectral.forward.node_response.pixel_weights` does the same in
NumPy.
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
def _add_curve(
    table: Array, first: int, factor: float, by: Array, kinds: Array, out: Array
) -> None:
    """Add a threshold's curves (kind, grid, node), read between grid points."""
    for kind in range(kinds.shape[0]):
        for q in range(by.shape[0]):
            share = factor * kinds[kind] * by[q]
            for n in range(out.shape[0]):
                out[n] += share * table[kind, first + q, n]


@njit(nogil=True, cache=True, error_model="numpy")
def node_weights(
    tables: Array,
    levels: Array,
    step: float,
    departures: Array,
    count_time: float,
    weight: Array,
) -> None:
    """Fill the counts of each node in each bin of pixels.

    tables (bin, kind, grid, node), per second; levels (threshold,) and step in keV;
    departures (pixel, parameter); weight (pixel, bin, node), in counts.
    """
    pixels, bins, _ = weight.shape
    size = departures.shape[1]
    value = np.empty(4)
    slope = np.empty(4)
    kinds = np.ones(4)
    for p in range(pixels):
        weight[p] = 0.0
        kinds[1] = departures[p, 0]
        kinds[2] = departures[p, size - 2]
        kinds[3] = departures[p, size - 1]
        factor = count_time * math.exp(departures[p, 0])
        for k in range(bins):
            level = levels[k] + departures[p, 1 + k]
            first = cubic_weights(level, step, tables.shape[2], value, slope)
            _add_curve(tables[k], first, factor, value, kinds, weight[p, k])
            if k > 0:
                _add_curve(
                    tables[k - 1], first, -factor, value, kinds, weight[p, k - 1]
                )
