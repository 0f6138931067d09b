"""How far pixels drift, learned from all of them, and what that makes of each."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

CLASSES = ("ln_area", "shift_kev", "variance_kev2", "ln_dead_time")
"""Kinds of departures; all thresholds of a detector drift alike."""
SCORING_ROUNDS = 12
SAMPLE = 8192
FAR = 5.0
USUAL_SHARE = 0.02
"""Usual variance of a drift over that of the pixels themselves (common practice, no
source)."""


def class_of(parameters: int) -> NDArray[np.int64]:
    """Index into `CLASSES` of each departure."""
    return np.array([0, *[1] * (parameters - 3), 2, 3])


def updated(
    information: NDArray[np.float64],
    pull: NDArray[np.float64],
    start: NDArray[np.float64],
    own: NDArray[np.float64],
    variance: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Posterior mean and covariance of departures that drifted.

    Parameters
    ----------
    information : array, shape (pixel, parameter, parameter)
    pull : array, shape (pixel, parameter)
        Information times the departures that the counts alone would give.
    start : array, shape (pixel, parameter)
        Departures before, and
    own : array, shape (pixel, parameter, parameter)
        their covariance.
    variance : array, shape (4,)
        Of the drift, for each of `CLASSES`.
    """
    prior = own + np.diag(variance[class_of(start.shape[1])])
    # posterior = (1 + prior information)^-1 prior: nothing near singular is inverted
    inner = np.eye(start.shape[1]) + prior @ information
    covariance = np.linalg.solve(inner, prior)
    covariance = 0.5 * (covariance + covariance.transpose(0, 2, 1))
    news = pull - (information @ start[..., None])[..., 0]
    return start + (covariance @ news[..., None])[..., 0], covariance


def drift_variance(
    information: NDArray[np.float64],
    pull: NDArray[np.float64],
    start: NDArray[np.float64],
    own: NDArray[np.floating],
    variance: NDArray[np.float64],
    largest: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Variance of the drift that makes the pixels' counts most probable.

    Parameters are those of `updated`, with

    variance : array, shape (4,)
        To start from.
    largest : array, shape (4,)
        Upper bounds.

    Returns
    -------
    variance, error : arrays, shape (4,)
        The latter is the standard error of the former.

    Notes
    -----
    Fisher scoring. With J the information on a pixel's drift once its calibrated
    departures' error is added, Q = (J^-1 + D)^-1 and w = Q (apparent drift), the score
    of class c is half the sum over pixels and its departures of w^2 - Q_ii. An
    exponential prior of mean USUAL_SHARE x ``largest`` keeps a variance at 0 of which
    the counts say nothing.
    """
    sample = slice(None, None, max(1, information.shape[0] // SAMPLE))
    information, own = information[sample], own[sample].astype(np.float64)
    size = start.shape[1]
    which = np.eye(len(CLASSES))[class_of(size)]
    inner = np.eye(size) + information @ own
    known = np.linalg.solve(inner, information)
    news = pull[sample] - (information @ start[sample][..., None])[..., 0]
    apparent = np.linalg.solve(inner, news[..., None])[..., 0]
    scale = which @ largest
    fisher = np.eye(len(CLASSES))
    for _ in range(SCORING_ROUNDS):
        spread = np.eye(size) + known * (which @ variance)
        weight = np.linalg.solve(spread, known)
        pulls = np.linalg.solve(spread, apparent[..., None])[..., 0]
        own_weight = np.maximum(np.diagonal(weight, axis1=1, axis2=2), 0.0)
        near = (pulls**2 <= FAR**2 * (own_weight + 1e-12 / scale)).all(axis=1)
        score = 0.5 * (pulls[near] ** 2 - own_weight[near]).sum(axis=0) @ which
        score = score - 1.0 / (USUAL_SHARE * largest)
        fisher = 0.5 * which.T @ (weight[near] ** 2).sum(axis=0) @ which
        fisher = fisher + np.diag(1e-3 / largest**2)
        # a variance that its bound holds takes no part in the step of the others
        held = (variance <= 0.0) & (score < 0.0)
        held |= (variance >= largest) & (score > 0.0)
        free = np.flatnonzero(~held)
        step = np.zeros_like(variance)
        step[free] = np.linalg.solve(fisher[np.ix_(free, free)], score[free])
        new = np.clip(variance + step, 0.0, largest)
        still = np.abs(new - variance).max() < 1e-4 * largest.max()
        variance = new
        if still:
            break
    return variance, np.sqrt(np.diag(np.linalg.inv(fisher)))
