"""Compiled sums over pixels of what their thresholds read off counting curves.

Flat arrays in, sums added to; no validation. `spectral.calibration.pooled_counts`
prepares the arguments; the NumPy twin stands in
`spectral.kernels.pooled_reading_numpy`.
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
def add_up(
    curve: Array,
    by_rate: Array,
    by_variance: Array,
    by_dead: Array,
    levels: Array,
    step: float,
    values: Array,
    above: Array,
    change: Array,
) -> None:
    """Add counts above thresholds, and their changes, of all pixels.

    curve and by_* (case, grid), per second; levels (threshold,) and step in keV;
    values (pixel, parameter); above (case, threshold), per second; change (case,
    threshold, 4), with ln area, the threshold's shift, noise variance, ln dead time.
    """
    pixels, size = values.shape
    cases, grid = curve.shape
    value = np.empty(4)
    slope = np.empty(4)
    for p in range(pixels):
        ln_area = values[p, 0]
        area = math.exp(ln_area)
        variance = values[p, size - 2]
        ln_dead = values[p, size - 1]
        for k in range(size - 3):
            first = cubic_weights(
                levels[k] + values[p, 1 + k], step, grid, value, slope
            )
            for e in range(cases):
                mean = tilt = r = v = d = 0.0
                for q in range(4):
                    g = first + q
                    here = by_rate[e, g]
                    wide = by_variance[e, g]
                    slow = by_dead[e, g]
                    mixed = (
                        curve[e, g] + ln_area * here + variance * wide + ln_dead * slow
                    )
                    mean += value[q] * mixed
                    tilt += slope[q] * mixed
                    r += value[q] * here
                    v += value[q] * wide
                    d += value[q] * slow
                above[e, k] += area * mean
                change[e, k, 0] += area * (mean + r)
                change[e, k, 1] += area * tilt
                change[e, k, 2] += area * v
                change[e, k, 3] += area * d
