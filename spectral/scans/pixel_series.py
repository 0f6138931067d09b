"""How steadily each pixel counts through a series of exposures.

A sound pixel's counts follow those of the whole detector: up to a factor of its own,
up to few smooth departures that other pixels show as well (a threshold a little off,
a longer dead time), and up to counting noise. What is left over is tested against
the chi-square law.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Chance that a sound pixel fails a test, for all thresholds together.
FALSE_ALARM = 1e-4

_FEWEST_FOR_COMPONENTS = 8
_SAMPLE_PIXELS = 20_000
_BLOCK_PIXELS = 1 << 16
_FEWEST_COUNTS = 5.0


def scatter(
    counts: NDArray[np.integer],
    valid: NDArray[np.bool_],
    usable: NDArray[np.bool_],
    groups: NDArray[np.int64],
) -> tuple[NDArray[np.float64], int]:
    """Chi-square of each pixel about what the whole detector did.

    Parameters
    ----------
    counts : array of integers, shape (exposure, pixel)
        Counts above one threshold, exposures with a beam only.
    valid : array of bool, shape (exposure, pixel)
        False where a count cannot be; it then says nothing for or against a pixel.
    usable : array of bool, shape (pixel,)
        Pixels that say what the whole detector did.
    groups : array of int, shape (exposure,)
        Exposures of one setting share a number.

    Returns
    -------
    chi_square : array, shape (pixel,)
    degrees : int
        Degrees of freedom; 0 if the series is too short to say anything.

    Notes
    -----
    With eight exposures or more, the departures that many pixels share are found by
    spherical principal components (each pixel's residual scaled to unit length, so
    that a few bad pixels cannot make a component of their own) and taken out. With
    fewer, exposures are compared only with their own repeats.
    Source: N. Locantore et al. 1999, Test 8, 1 (spherical components; from memory).
    """
    level = np.median(counts[:, usable], axis=1) if usable.any() else np.zeros(0)
    enough = level >= _FEWEST_COUNTS
    counts, valid = counts[enough], valid[enough]
    level, groups = level[enough], groups[enough]
    if len(level) < 2:
        return np.zeros(usable.shape), 0
    if len(level) >= _FEWEST_FOR_COMPONENTS:
        sample = np.flatnonzero(usable)[:: max(1, usable.sum() // _SAMPLE_PIXELS)]
        residual = residuals(counts[:, sample], valid[:, sample], level)
        directions = shared_directions(residual, level)
    else:
        directions = _group_directions(level, groups)
    degrees = len(level) - directions.shape[1]
    if degrees < 1:
        return np.zeros(usable.shape), 0
    out = np.empty(usable.shape)
    for start in range(0, len(out), _BLOCK_PIXELS):
        block = slice(start, start + _BLOCK_PIXELS)
        residual = residuals(counts[:, block], valid[:, block], level)
        left = residual - directions @ (directions.T @ residual)
        out[block] = np.einsum("ep,ep->p", left, left)
    return out, degrees


def residuals(
    counts: NDArray[np.integer],
    valid: NDArray[np.bool_],
    level: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Departure from the detector's level times the pixel's own factor.

    Parameters
    ----------
    counts : array of integers, shape (exposure, pixel)
    valid : array of bool, shape (exposure, pixel)
    level : array, shape (exposure,)

    Returns
    -------
    array, shape (exposure, pixel)
        In units of the Poisson standard deviation; 0 where not valid.
    """
    total = np.where(valid, counts, 0).sum(axis=0, dtype=np.float64)
    seen = np.maximum(level @ valid, level.min())
    factor = np.maximum(total, 1.0) / seen
    expected = level[:, None] * factor
    return np.where(valid, (counts - expected) / np.sqrt(expected), 0.0)


def _group_directions(
    level: NDArray[np.float64], groups: NDArray[np.int64]
) -> NDArray[np.float64]:
    """One direction a setting, along which repeats of it agree."""
    out = np.zeros((len(level), 0))
    for group in np.unique(groups):
        one = np.where(groups == group, np.sqrt(level), 0.0)
        out = np.column_stack([out, one / np.linalg.norm(one)])
    return out


def shared_directions(
    residual: NDArray[np.float64], level: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Orthonormal directions in which the whole population departs.

    Parameters
    ----------
    residual : array, shape (exposure, pixel)
    level : array, shape (exposure,)

    Returns
    -------
    array, shape (exposure, direction)
        The first is the pixel's own factor. Another one is taken while it holds
        clearly more than noise would: half as much again, and more than three in a
        hundred pixels could bring about. At most a third of the exposures.
    """
    n = len(level)
    directions: NDArray[np.float64] = np.sqrt(level / level.sum())[:, None]
    while directions.shape[1] < n // 3:
        left = residual - directions @ (directions.T @ residual)
        length = np.linalg.norm(left, axis=0)
        left = left[:, length > 0] / length[length > 0]
        if left.shape[1] < n:
            break
        free = n - directions.shape[1]
        share, vectors = np.linalg.eigh(left @ left.T / left.shape[1])
        if share[-1] * free < max(1.5, 1.0 + 0.03 * free):
            break
        new = vectors[:, -1] - directions @ (directions.T @ vectors[:, -1])
        directions = np.column_stack([directions, new / np.linalg.norm(new)])
    return directions


def too_scattered(
    chi_square: NDArray[np.float64],
    degrees: int,
    usable: NDArray[np.bool_],
    *,
    chance: float,
) -> NDArray[np.bool_]:
    """Pixels that scatter more than chance and the population allow.

    Parameters
    ----------
    chi_square : array, shape (pixel,)
    degrees : int
    usable : array of bool, shape (pixel,)
        Pixels that set the scale.
    chance : float
        Of a sound pixel to fail.

    Notes
    -----
    Dead time makes counts scatter less than Poisson numbers, a flickering tube more:
    the law is scaled to the middle and to the upper tenth of the population.
    """
    if degrees < 1 or not usable.any():
        return np.zeros(chi_square.shape, bool)
    seen = np.quantile(chi_square[usable], [0.5, 0.9])
    scale = float(np.max(seen / stats.chi2.ppf([0.5, 0.9], degrees)))
    limit = stats.chi2.isf(chance, degrees) * max(scale, 0.1)
    return np.asarray(chi_square > limit)
