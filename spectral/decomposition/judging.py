"""Which estimates deserve doubt, and by how much."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.spatial import ConvexHull, QhullError
from scipy.stats import chi2

from spectral.scans.flags import PixelFlag

if TYPE_CHECKING:
    from numpy.typing import NDArray

LEAST_COUNTS = 20.0
"""Fewer counts in all bins together leave no near-normal estimate."""
OUTSIDE_SIGMAS = 4.0
MISFIT_TAIL = 1e-5
RATE_MARGIN = 1.05
RATE_SIGMAS = 5.0


def domain_facets(steps: NDArray[np.float64]) -> NDArray[np.float64]:
    """Facets of the hull of the calibrated stacks.

    Parameters
    ----------
    steps : array, shape (step, material), in g/cm2

    Returns
    -------
    array, shape (facet, material + 1)
        Outward unit normals and offsets: inside where normal . a + offset <= 0.
        The box of the steps where they do not span a volume.
    """
    if steps.shape[1] > 1:
        scale = np.maximum(steps.max(axis=0), 1e-12)
        try:
            facets = np.asarray(ConvexHull(steps / scale).equations)
        except QhullError:
            pass
        else:
            facets[:, :-1] /= scale
            length = np.linalg.norm(facets[:, :-1], axis=1, keepdims=True)
            return np.unique(np.round(facets / length, 12), axis=0)
    size = steps.shape[1]
    low = np.concatenate([-np.eye(size), steps.min(axis=0)[:, None]], axis=1)
    high = np.concatenate([np.eye(size), -steps.max(axis=0)[:, None]], axis=1)
    return np.concatenate([low, high])


def sigmas_outside(
    estimate: NDArray[np.float64],
    covariance: NDArray[np.float64],
    facets: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Distance outside the domain in standard errors, shape (pixel,); -inf inside.

    Parameters
    ----------
    estimate : array, shape (pixel, material), in g/cm2
    covariance : array, shape (pixel, material, material)
    facets : array, shape (facet, material + 1)
    """
    outside = np.full(len(estimate), -np.inf)
    for facet in facets:
        normal, offset = facet[:-1], facet[-1]
        beyond = estimate @ normal + offset
        here = np.flatnonzero(~(beyond <= 0.0))
        variance = np.einsum("i,pij,j->p", normal, covariance[here], normal)
        sigmas = beyond[here] / np.sqrt(np.maximum(variance, 1e-30))
        outside[here] = np.maximum(outside[here], sigmas)
    return outside


def misfit_limit(freedom: int, extra: NDArray[np.float64]) -> NDArray[np.float64]:
    """Deviance per degree of freedom above which the counts fit no mixture.

    Parameters
    ----------
    freedom : int
        Bins minus materials; 0 has no limit.
    extra : array, shape (pixel,)
        Share by which the calibration's own errors raise the deviance.

    Returns
    -------
    array, shape (pixel,)

    Notes
    -----
    Upper tail of chi-square at MISFIT_TAIL. Source: S. S. Wilks, Ann. Math. Stat. 9
    (1938) 60.
    """
    if freedom < 1:
        return np.full(extra.shape, np.inf)
    return np.asarray(chi2.isf(MISFIT_TAIL, freedom) / freedom * (1.0 + extra))


def rate_share(
    counts: NDArray[np.float64], limit: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Count rate over the highest calibrated one, less what counting scatters.

    Parameters
    ----------
    counts, limit : arrays, shape (pixel,)
        Counts above the lowest threshold, and those at the highest calibrated rate in
        the same time.
    """
    scatter = RATE_SIGMAS * np.sqrt(np.maximum(limit, 1.0))
    return np.asarray((counts - scatter) / np.maximum(limit, 1.0))


def judge(
    *,
    total_counts: NDArray[np.float64],
    outside: NDArray[np.float64],
    deviance: NDArray[np.float64],
    limit: NDArray[np.float64],
    converged: NDArray[np.bool_],
    over_rate: NDArray[np.float64],
) -> NDArray[np.uint16]:
    """Flags of estimates, shape (pixel,); see `PixelFlag`.

    Parameters
    ----------
    total_counts : array, shape (pixel,)
        Counts above the lowest threshold.
    outside : array, shape (pixel,)
        As `sigmas_outside`.
    deviance, limit : arrays, shape (pixel,)
    converged : array of bool, shape (pixel,)
    over_rate : array, shape (pixel,)
        As the function `rate_share`.
    """
    flags = np.zeros(total_counts.shape, np.uint16)
    for flag, where in (
        (PixelFlag.FEW_COUNTS, total_counts < LEAST_COUNTS),
        (PixelFlag.OUTSIDE_DOMAIN, outside > OUTSIDE_SIGMAS),
        (PixelFlag.MISFIT, deviance > limit),
        (PixelFlag.NOT_CONVERGED, ~converged),
        (PixelFlag.RATE_TOO_HIGH, over_rate > RATE_MARGIN),
    ):
        flags[where] |= np.uint16(flag)
    return flags
