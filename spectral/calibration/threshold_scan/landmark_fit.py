"""Landmarks fitted in many pixels at once, by penalised Poisson likelihood."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import xlogy

from spectral.calibration.threshold_scan.landmark_curve import landmark_curve

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.threshold_scan.landmark_curve import CurveTable

CHUNK = 4096
ROUNDS = 40
PEDESTAL, SUNK = 0.5, 0.4
"""Counts added to both sides, so that a curve may touch zero; the score keeps its mean
of zero, and little is lost where counts are many. No curve sinks lower than `SUNK`."""
ENOUGH = 1e-3
"""Stop when the next step promises less than this in log-likelihood."""
NEARLY = 0.01
"""A fit that stops short of that is taken when no more than this is left to gain: a
seventh of the standard error at most."""
LARGEST_STEP = np.log(2.0)
"""Of ln width and ln height in one round."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CurvePrior:
    """Normal prior of the curve's parameters; an infinite spread leaves one free.

    Attributes
    ----------
    mean : array, shape (parameter,) or (pixel, parameter)
    spread : array, shape (parameter,)
    """

    mean: NDArray[np.float64]
    spread: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CurveFit:
    """Fitted curves.

    Attributes
    ----------
    values : array, shape (pixel, parameter)
    covariance : array, shape (pixel, parameter, parameter)
        Inverse of the penalised information.
    deviance : array, shape (pixel,)
        Poisson deviance.
    freedom : array, shape (pixel,)
        Settings used less the parameters that they determine.
    converged : array of bool, shape (pixel,)
    """

    values: NDArray[np.float64]
    covariance: NDArray[np.float64]
    deviance: NDArray[np.float64]
    freedom: NDArray[np.float64]
    converged: NDArray[np.bool_]


def fit_curves(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    counts: NDArray[np.float64],
    used: NDArray[np.bool_],
    start: NDArray[np.float64],
    prior: CurvePrior,
) -> CurveFit:
    """Parameters of every pixel's curve.

    Parameters
    ----------
    table : CurveTable
    e_kev : array, shape (setting,) or (pixel, setting), in keV
        Roughly known energy of each setting, less the landmark's.
    counts : array, shape (pixel, setting)
    used : array of bool, shape (pixel, setting)
        Settings that take part.
    start : array, shape (pixel, parameter)
    prior : CurvePrior

    Notes
    -----
    Fisher scoring with a damping of each pixel's own that falls after a good step and
    grows after a bad one. Source: K. Levenberg, Q. Appl. Math. 2 (1944) 164;
    D. Marquardt, J. Soc. Ind. Appl. Math. 11 (1963) 431.
    """
    mean = np.broadcast_to(prior.mean, start.shape)
    energy = np.broadcast_to(e_kev, counts.shape)
    parts = [
        _fit_block(
            table,
            energy[rows],
            counts[rows] + PEDESTAL,
            used[rows],
            start[rows],
            mean[rows],
            prior.spread,
        )
        for rows in (
            slice(first, first + CHUNK) for first in range(0, len(counts), CHUNK)
        )
    ]
    return CurveFit(
        values=np.concatenate([p.values for p in parts]),
        covariance=np.concatenate([p.covariance for p in parts]),
        deviance=np.concatenate([p.deviance for p in parts]),
        freedom=np.concatenate([p.freedom for p in parts]),
        converged=np.concatenate([p.converged for p in parts]),
    )


def _lifted_curve(
    table: CurveTable, e_kev: NDArray[np.float64], values: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Expected counts on the pedestal, and derivatives, none where they touch 0."""
    expected, slopes = landmark_curve(table, e_kev, values)
    below = expected < -SUNK
    slopes = np.where(below[:, None, :], 0.0, slopes)
    return np.where(below, -SUNK, expected) + PEDESTAL, slopes


def poisson_deviance(
    counts: NDArray[np.float64], expected: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Terms of the Poisson deviance.

    Source: S. Baker, R. D. Cousins, Nucl. Instrum. Methods 221 (1984) 437.
    """
    return np.asarray(2.0 * (expected - counts + xlogy(counts, counts / expected)))


def _fit_block(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    counts: NDArray[np.float64],
    used: NDArray[np.bool_],
    start: NDArray[np.float64],
    mean: NDArray[np.float64],
    spread: NDArray[np.float64],
) -> CurveFit:
    """One block of pixels, of which those that have converged step aside."""
    precision = 1.0 / spread**2
    pixels, size = start.shape
    values = start.copy()
    converged = np.zeros(pixels, bool)
    damping = np.full(pixels, 1e-3)
    objective = np.full(pixels, np.inf)
    information = np.tile(np.eye(size), (pixels, 1, 1))
    trial = start.copy()
    score = np.zeros((pixels, size))
    open_ = np.arange(pixels)
    for _ in range(ROUNDS):
        at = trial[open_]
        expected, slopes = _lifted_curve(table, e_kev[open_], at)
        off = at - mean[open_]
        y, w = counts[open_], used[open_]
        new = np.sum(poisson_deviance(y, expected) * w, axis=1)
        new += np.sum(precision * off**2, axis=1)
        better = new <= objective[open_]
        i = open_[better]
        values[i], objective[i] = at[better], new[better]
        s, mu = slopes[better], expected[better]
        scaled = s * (w[better] / mu)[:, None]
        information[i] = np.matmul(scaled, s.transpose(0, 2, 1)) + np.diag(precision)
        left = (y[better] - mu)[..., None]
        score[i] = np.matmul(scaled, left)[..., 0] - precision * off[better]
        damping[open_] = np.where(better, damping[open_] * 0.1, damping[open_] * 10.0)
        step, gain = _step(information[open_], score[open_], damping[open_])
        trial[open_] = values[open_] + step
        finished = better & (gain < ENOUGH) & (damping[open_] < 1.0)
        converged[open_[finished]] = True
        open_ = open_[~finished & (damping[open_] < 1e8)]
        if open_.size == 0:
            break
    _, promised = _step(information, score, np.zeros(pixels))
    converged |= promised < NEARLY
    expected, _ = _lifted_curve(table, e_kev, values)
    deviance = np.sum(poisson_deviance(counts, expected) * used, axis=1)
    own = information - np.diag(precision)
    covariance = np.asarray(np.linalg.inv(information + 1e-12 * np.eye(size)))
    determined = np.einsum("pij,pji->p", covariance, own)
    return CurveFit(
        values=values,
        covariance=covariance,
        deviance=deviance,
        freedom=np.maximum(used.sum(axis=1) - determined, 1.0),
        converged=converged,
    )


def _step(
    information: NDArray[np.float64],
    score: NDArray[np.float64],
    damping: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Damped step of each pixel, and what it promises in log-likelihood."""
    diagonal = np.einsum("pii->pi", information)
    damped = information.copy()
    np.einsum("pii->pi", damped)[:] += damping[:, None] * diagonal + 1e-12
    step = np.linalg.solve(damped, score[..., None])[..., 0]
    gain = 0.5 * np.abs(np.sum(step * score, axis=1))
    step[:, 1:3] = np.clip(step[:, 1:3], -LARGEST_STEP, LARGEST_STEP)
    return np.asarray(step), np.asarray(gain)
