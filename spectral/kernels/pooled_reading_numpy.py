"""NumPy twin of `spectral.kernels.pooled_reading`."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.kernels.pixel_likelihood_numpy import cubic_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]


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
    """Add the same sums as the compiled function, for a few pixels at a time."""
    first, value, slope = cubic_weights(levels + values[:, 1:-2], step, curve.shape[1])
    area, ln_area = np.exp(values[:, :1]), values[:, :1]
    variance, ln_dead = values[:, -2:-1], values[:, -1:]

    def read(of: Array, by: Array) -> Array:
        return np.asarray(sum(of[:, first + q] * by[q] for q in range(4)))

    def mixed(by: Array) -> Array:
        moved = ln_area * read(by_rate, by) + variance * read(by_variance, by)
        return read(curve, by) + moved + ln_dead * read(by_dead, by)

    mean = mixed(value)
    above += (area * mean).sum(axis=1)
    change[..., 0] += (area * (mean + read(by_rate, value))).sum(axis=1)
    change[..., 1] += (area * mixed(slope)).sum(axis=1)
    change[..., 2] += (area * read(by_variance, value)).sum(axis=1)
    change[..., 3] += (area * read(by_dead, value)).sum(axis=1)
