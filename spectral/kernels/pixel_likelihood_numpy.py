"""NumPy twin of `spectral.kernels.pixel_likelihood`."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

LEAST = 1e-6


def cubic_weights(
    level: Array, step: float, grid: int
) -> tuple[NDArray[np.int64], Array, Array]:
    """First of four grid points, and their weights for value and slope, (4, ...)."""
    place = np.clip(level / step, 1.0, grid - 2.001)
    first = place.astype(np.int64) - 1
    t = place - first - 1.0
    corner = np.array([-1.0, 0.0, 1.0, 2.0])
    value = np.ones((4, *t.shape))
    slope = np.zeros((4, *t.shape))
    for q in range(4):
        others = [i for i in range(4) if i != q]
        scale = np.prod([corner[q] - corner[i] for i in others])
        parts = [t - corner[i] for i in others]
        value[q] = parts[0] * parts[1] * parts[2] / scale
        slope[q] = (parts[0] * parts[1] + parts[0] * parts[2] + parts[1] * parts[2]) / (
            scale * step
        )
    return first, value, slope


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
    """Fill the same arrays as the compiled function, for a few pixels at a time."""
    pixels, exposures, bins = counts.shape
    size = bins + 3
    first, value, slope = cubic_weights(levels + values[:, 1:-2], step, curve.shape[1])

    def read(of: Array, by: Array) -> Array:
        out = sum(of[:, first + q] * by[q] for q in range(4))
        return np.asarray(out).transpose(1, 0, 2)

    area = np.exp(values[:, 0])[:, None, None] * time[:, None]
    ln_area = values[:, 0, None, None]
    variance = values[:, -2, None, None]
    ln_dead = values[:, -1, None, None]
    above = area * (
        read(curve, value)
        + ln_area * read(by_rate, value)
        + variance * read(by_variance, value)
        + ln_dead * read(by_dead, value)
    )
    steep = area * (
        read(curve, slope)
        + ln_area * read(by_rate, slope)
        + variance * read(by_variance, slope)
        + ln_dead * read(by_dead, slope)
    )
    jacobian = np.zeros((pixels, exposures, bins + 1, size))
    jacobian[:, :, :-1, 0] = above + area * read(by_rate, value)
    for k in range(bins):
        jacobian[:, :, k, 1 + k] = steep[:, :, k]
    jacobian[:, :, :-1, -2] = area * read(by_variance, value)
    jacobian[:, :, :-1, -1] = area * read(by_dead, value)
    jacobian = -np.diff(jacobian, axis=2) * ratio[..., None]
    padded = np.concatenate([above, np.zeros((pixels, exposures, 1))], axis=2)
    plain = np.maximum(-np.diff(padded, axis=2), LEAST)
    total_expected += plain.sum(axis=0)
    expected = plain * ratio
    left = counts - expected
    boost = lost / np.maximum(1.0 - lost * expected.sum(axis=2), 0.1)
    together = jacobian.sum(axis=2)
    information[...] = np.einsum(
        "pebi,pebj->pij", jacobian / expected[..., None], jacobian, optimize=True
    ) + np.einsum("pei,pej,pe->pij", together, together, boost, optimize=True)
    score[...] = np.einsum("pebi,peb->pi", jacobian, left / expected) + np.einsum(
        "pei,pe->pi", together, boost * left.sum(axis=2)
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        logs = np.where(counts > 0.0, counts * np.log(counts / expected), 0.0)
    total = 2.0 * (logs - left).sum(axis=(1, 2))
    total += (boost * left.sum(axis=2) ** 2).sum(axis=1)
    deviance[...] = total / (exposures * bins)


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
    """Add the same sums as the compiled function, for a few pixels at a time."""
    first, value, _ = cubic_weights(levels + values[:, 1:-2], step, curve.shape[1])

    def read(of: Array) -> Array:
        return np.asarray(sum(of[:, first + q] * value[q] for q in range(4)))

    mixed = read(curve) + values[:, :1] * read(by_rate)
    mixed += values[:, -2:-1] * read(by_variance) + values[:, -1:] * read(by_dead)
    above = np.exp(values[:, :1]) * time[:, None, None] * mixed
    bins = -np.diff(above, axis=2, append=0.0)
    total_expected += np.maximum(bins, LEAST).sum(axis=1)
