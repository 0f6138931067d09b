"""Stretches of a column or a row that fail together."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

if TYPE_CHECKING:
    from numpy.typing import NDArray

_WINDOW = 8
_CHANCE = 1e-6


def line_stretches(failing: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Pixels of columns and rows whose failures stand too close for chance.

    A window of eight pixels along a line is taken when it holds more failing pixels
    than a binomial law with the detector's own share of them allows (one in a
    million windows); the stretch runs from its first failing pixel to its last, the
    ones between included.

    Parameters
    ----------
    failing : array of bool, shape (row, column)

    Returns
    -------
    array of bool, shape (row, column)

    Examples
    --------
    >>> image = np.zeros((40, 30), bool)
    >>> image[10:25, 7] = True
    >>> image[14, 7] = False
    >>> np.flatnonzero(line_stretches(image)[:, 7])[[0, 4, -1]].tolist()
    [10, 14, 24]
    """
    out = np.zeros_like(failing)
    share = max(1.0 / failing.size, _typical_share(failing))
    fewest = int(stats.binom.isf(_CHANCE, _WINDOW, min(share, 0.5))) + 1
    fewest = max(fewest, 3)
    for lines, marks in ((failing.T, out.T), (failing, out)):
        if lines.shape[1] < _WINDOW:
            continue
        for line, mark in zip(lines, marks, strict=True):
            if line.sum() >= fewest:
                np.logical_or(mark, _stretches(line, fewest), out=mark)
    return out


def _typical_share(failing: NDArray[np.bool_]) -> float:
    """Share of failing pixels, without the lines that fail as a whole."""
    by_column = failing.mean(axis=0)
    by_row = failing.mean(axis=1)
    return float(
        min(
            by_column[by_column <= np.quantile(by_column, 0.9)].mean(),
            by_row[by_row <= np.quantile(by_row, 0.9)].mean(),
        )
    )


def _stretches(line: NDArray[np.bool_], fewest: int) -> NDArray[np.bool_]:
    """Stretches of one line, from first to last failing pixel of full windows."""
    out = np.zeros_like(line)
    places = np.flatnonzero(line)
    for first, last in zip(places, places[fewest - 1 :], strict=False):
        if last - first < _WINDOW:
            out[first : last + 1] = True
    return out
