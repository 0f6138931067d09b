"""Every pixel's departures, drawn towards the population as far as data allow."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    CurveTables,
    PixelDepartures,
    expected_above,
)

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.calibration.wedge_data import WedgeData

CHUNK = 2048
NS = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PixelFit:
    """Departures of all good pixels, and the spread that they were drawn from.

    Attributes
    ----------
    values : array, shape (pixel, parameter)
        Posterior means (`spectral.forward.pixel_response.PixelDepartures`).
    covariance : array, shape (pixel, parameter, parameter)
        Posterior covariances.
    spread : array, shape (parameter, parameter)
        Covariance of the departures between pixels, learned from the scan.
    deviance : array, shape (pixel,)
        Deviance per degree of freedom of each pixel's fit.
    ratio : array, shape (exposure, bin)
        Sum of counts over sum of expected counts of all pixels.
    """

    values: NDArray[np.float64]
    covariance: NDArray[np.float64]
    spread: NDArray[np.float64]
    deviance: NDArray[np.float64]
    ratio: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Summary:
    """Quadratic form of each pixel's log-likelihood, and sums over pixels."""

    information: NDArray[np.float64]
    pull: NDArray[np.float64]
    deviance: NDArray[np.float64]
    expected: NDArray[np.float64]


def prior_spread(thresholds: int) -> NDArray[np.float64]:
    """Spread of the departures to start from: 3 %, 1.5 keV, 1 keV2, 5 %."""
    return np.diag([0.03, *([1.5] * thresholds), 1.0, 0.05]) ** 2


def fit_pixels(
    data: WedgeData,
    tables: CurveTables,
    levels_kev: NDArray[np.float64],
    *,
    dead_time_ns: float,
    rounds: int = 4,
    progress: Callable[[float], None] | None = None,
) -> PixelFit:
    """Departures of every pixel by penalised likelihood (empirical Bayes).

    Parameters
    ----------
    data : WedgeData
    tables : CurveTables
        Curves of the average pixel at the data's exposures, per second.
    levels_kev : array, shape (threshold,), in keV
        Thresholds of the average pixel.
    dead_time_ns : float
        For the covariance of the counts.
    rounds : int
        Gauss-Newton rounds; the spread is learned anew in each.
    progress : callable, optional
        Called with the finished share.

    Notes
    -----
    The spread maximises the marginal likelihood of all pixels by expectation
    maximisation on the quadratic form of each pixel's likelihood. Source: A. P.
    Dempster, N. M. Laird, D. B. Rubin, J. R. Stat. Soc. B 39 (1977) 1; empirical
    Bayes, H. Robbins (1956).
    """
    counts = data.bins
    thresholds = levels_kev.size
    spread = prior_spread(thresholds)
    values = np.zeros((counts.shape[0], thresholds + 3))
    ratio = np.ones(counts.shape[1:])
    lost = 2.0 * dead_time_ns * NS / data.count_time_s
    covariance = np.empty((0, 0, 0))
    parts: list[_Summary] = []
    for turn in range(rounds + 1):
        parts = []
        for first in range(0, counts.shape[0], CHUNK):
            rows = slice(first, first + CHUNK)
            parts.append(
                _summarise(
                    counts[rows], tables, levels_kev, values[rows], ratio, lost,
                    data.count_time_s,
                )
            )  # fmt: skip
            if progress is not None:
                share = min(1.0, (first + CHUNK) / counts.shape[0])
                progress((turn + share) / (rounds + 1))
        expected = sum((p.expected for p in parts), np.zeros_like(ratio))
        ratio = counts.sum(axis=0) / np.maximum(expected, 1e-9)
        if turn == rounds:
            break
        information = np.concatenate([p.information for p in parts])
        pull = np.concatenate([p.pull for p in parts])
        spread = learned_spread(information, pull, spread)
        values, covariance = posterior(information, pull, spread)
        # the average pixel has no departures: what all share belongs to the ratio
        values -= values.mean(axis=0)
    deviance = np.concatenate([p.deviance for p in parts])
    return PixelFit(
        values=values,
        covariance=covariance,
        spread=spread,
        deviance=deviance,
        ratio=ratio,
    )


def _summarise(
    counts: NDArray[np.float64],
    tables: CurveTables,
    levels_kev: NDArray[np.float64],
    values: NDArray[np.float64],
    ratio: NDArray[np.float64],
    lost: NDArray[np.float64],
    time: NDArray[np.float64],
) -> _Summary:
    """Information and score of a block of pixels at their present values."""
    above, slope = expected_above(tables, levels_kev, PixelDepartures(values=values))
    above *= time[:, None]
    slope *= time[:, None, None]
    plain = np.maximum(counts_to_bins(above), 1e-6)
    expected = plain * ratio
    jacobian = counts_to_bins(slope, axis=2) * ratio[..., None]
    left = counts - expected
    pixels, exposures, bins = counts.shape
    total = expected.sum(axis=2)
    boost = lost / np.maximum(1.0 - lost * total, 0.1)
    flat = jacobian.reshape(pixels, exposures * bins, -1)
    scaled = flat / expected.reshape(pixels, -1, 1)
    together = jacobian.sum(axis=2)
    information = np.matmul(scaled.transpose(0, 2, 1), flat) + np.matmul(
        (together * boost[..., None]).transpose(0, 2, 1), together
    )
    score = np.matmul(
        scaled.transpose(0, 2, 1), left.reshape(pixels, -1, 1)
    ) + np.matmul(together.transpose(0, 2, 1), (boost * left.sum(axis=2))[..., None])
    with np.errstate(divide="ignore", invalid="ignore"):
        logs = np.where(counts > 0, counts * np.log(counts / expected), 0.0)
    deviance = 2.0 * (logs - left).sum(axis=(1, 2))
    deviance += (boost * left.sum(axis=2) ** 2).sum(axis=1)
    pull = score[..., 0] + np.matmul(information, values[..., None])[..., 0]
    return _Summary(
        information=information,
        pull=pull,
        deviance=deviance / (exposures * bins),
        expected=plain.sum(axis=0),
    )


def posterior(
    information: NDArray[np.float64],
    pull: NDArray[np.float64],
    spread: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Posterior mean (pixel, parameter) and covariance of normal departures."""
    covariance = np.linalg.inv(information + np.linalg.inv(spread))
    return np.matmul(covariance, pull[..., None])[..., 0], covariance


def learned_spread(
    information: NDArray[np.float64],
    pull: NDArray[np.float64],
    spread: NDArray[np.float64],
    *,
    rounds: int = 60,
    floor: float = 1e-6,
) -> NDArray[np.float64]:
    """Spread of the departures that makes the pixels' data most probable.

    Pixels whose departure lies far outside (Mahalanobis distance beyond the 99.9 %
    point) do not take part, so that a few sick ones do not widen it.
    """
    size = spread.shape[0]
    sample = slice(None, None, max(1, information.shape[0] // 8192))
    information, pull = information[sample], pull[sample]
    for _ in range(rounds):
        mean, covariance = posterior(information, pull, spread)
        within = spread - covariance
        inverse = np.linalg.pinv(within.mean(axis=0), hermitian=True, rcond=1e-6)
        distance = np.einsum("pi,ij,pj->p", mean, inverse, mean)
        keep = distance < np.quantile(distance, 0.99) * 2.0
        second = mean[keep, :, None] * mean[keep, None, :] + covariance[keep]
        new = second.mean(axis=0)
        new = 0.5 * (new + new.T) + np.eye(size) * floor**2
        change = np.abs(new - spread).max() / np.abs(spread).max()
        spread = new
        if change < 1e-4:
            break
    return spread
