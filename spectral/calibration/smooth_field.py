"""Smooth change of the pixels' departures over the field (heel, sensor depth)."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import f as f_distribution

if TYPE_CHECKING:
    from numpy.typing import NDArray

BY_CHANCE = 1e-6
"""Probability that a parameter without a smooth part is given one."""
DEGREE = 2


def field_terms(flat: NDArray[np.int64], shape: tuple[int, int]) -> NDArray[np.float64]:
    """Polynomial terms of the pixels' places, shape (pixel, term), without constant.

    Parameters
    ----------
    flat : array of int64, shape (pixel,)
        Flat indices.
    shape : (row, column)
    """
    row, column = np.divmod(flat, shape[1])
    y = 2.0 * row / max(shape[0] - 1, 1) - 1.0
    x = 2.0 * column / max(shape[1] - 1, 1) - 1.0
    terms = [
        y**i * x**j
        for i in range(DEGREE + 1)
        for j in range(DEGREE + 1 - i)
        if i + j > 0
    ]
    stacked = np.stack(terms, axis=1)
    return np.asarray(stacked - stacked.mean(axis=0))


def smooth_field(
    values: NDArray[np.float64], terms: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Smooth part of each parameter, where the pixels show one beyond doubt.

    Parameters
    ----------
    values : array, shape (pixel, parameter)
        Departures found so far.
    terms : array, shape (pixel, term)

    Returns
    -------
    array, shape (pixel, parameter)
        0 for parameters whose smooth part is no larger than scatter makes by chance
        (F test).
    """
    pixels, size = terms.shape
    field = np.zeros_like(values)
    freedom = pixels - size - 1
    if freedom < 5 * size or np.linalg.matrix_rank(terms) < size:
        return field
    found, *_ = np.linalg.lstsq(terms, values, rcond=None)
    smooth = terms @ found
    explained = (smooth**2).sum(axis=0) / size
    left = ((values - values.mean(axis=0) - smooth) ** 2).sum(axis=0) / freedom
    ratio = explained / np.maximum(left, 1e-300)
    real = ratio > f_distribution.isf(BY_CHANCE, size, freedom)
    field[:, real] = smooth[:, real]
    return field
