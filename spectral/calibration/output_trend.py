"""How the tube's output went through a scan: a line and a warm-up."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

WARM_UP = (3.0, 6.0, 12.0)
"""Exposures after which a warm-up has shrunk to 1/e."""
ROUNDS = 20
FEWEST = 8
"""Exposures that a trend takes."""
LEAST_DEPARTURE = 1e-4


def output_trend(
    exposure: NDArray[np.int64],
    log_output: NDArray[np.float64],
    *,
    at: NDArray[np.int64],
) -> NDArray[np.float64]:
    """Smooth course of the tube's output, which single exposures cannot bend.

    Parameters
    ----------
    exposure : array, shape (exposure,)
        Places in the scan.
    log_output : array, shape (exposure,)
        Logarithm of the output found in each.
    at : array, shape (place,)
        Where the course is wanted.

    Returns
    -------
    array, shape (place,)
        Logarithm of the output; 0 if there are too few exposures.

    Notes
    -----
    A constant, a line and one decaying exponential, by least absolute residuals, so
    that a faulty exposure does not count. One exposure, even the first, cannot draw
    the exponential: its neighbours resist. Source: E. J. Schlossmacher, J. Am. Stat.
    Assoc. 68 (1973) 857 (absolute residuals by reweighting; from memory).
    """
    if exposure.size < FEWEST:
        return np.zeros(at.size)
    best = np.inf
    course: NDArray[np.float64] = np.zeros(at.size)
    for width in WARM_UP:
        terms = _terms(exposure, exposure, width)
        weight = np.ones(exposure.size)
        found = np.zeros(terms.shape[1])
        for _ in range(ROUNDS):
            weighted = terms * weight[:, None]
            found = np.asarray(np.linalg.lstsq(weighted, log_output * weight)[0])
            left = np.abs(log_output - terms @ found)
            weight = 1.0 / np.sqrt(np.maximum(left, LEAST_DEPARTURE))
        size = float(np.abs(log_output - terms @ found).sum())
        if size < best:
            best, course = size, _terms(at, exposure, width) @ found
    return course


def trend_terms(exposure: NDArray[np.int64]) -> NDArray[np.float64]:
    """Terms of a trend of middling warm-up, shape (exposure, term)."""
    return _terms(exposure, exposure, WARM_UP[1])


def _terms(
    at: NDArray[np.int64], exposure: NDArray[np.int64], width: float
) -> NDArray[np.float64]:
    place = at - float(exposure.min())
    line = place / max(float(np.ptp(exposure)), 1.0)
    return np.stack([np.ones(at.size), line, np.exp(-place / width)], axis=1)
