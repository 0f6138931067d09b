"""Every pixel's departures, drawn towards the population as far as data allow."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.smooth_field import field_terms, smooth_field
from spectral.kernels import pixel_likelihood

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.calibration.wedge_data import WedgeData
    from spectral.forward.pixel_response import CurveTables

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


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MeasuredShifts:
    """Threshold shifts of pixels known from elsewhere, such as a threshold scan.

    Attributes
    ----------
    shift_kev, sigma_kev : arrays, shape (pixel, threshold), in keV
        Shift against the average pixel and its standard deviation; infinite where
        nothing is known.
    """

    shift_kev: NDArray[np.float64]
    sigma_kev: NDArray[np.float64]

    def add_to(
        self, information: NDArray[np.float64], pull: NDArray[np.float64]
    ) -> None:
        """Add what is known to the quadratic form of the likelihood, in place."""
        precision = self.sigma_kev**-2
        for k in range(self.shift_kev.shape[1]):
            information[:, 1 + k, 1 + k] += precision[:, k]
            pull[:, 1 + k] += precision[:, k] * self.shift_kev[:, k]


def prior_spread(thresholds: int) -> NDArray[np.float64]:
    """Spread of the departures to start from: 3 %, 1.5 keV, 1 keV2, 5 %."""
    return np.diag([0.03, *([1.5] * thresholds), 1.0, 0.05]) ** 2


def fit_pixels(
    data: WedgeData,
    tables: CurveTables,
    levels_kev: NDArray[np.float64],
    *,
    dead_time_ns: float,
    measured: MeasuredShifts | None = None,
    rounds: int = 4,
    threads: int = 2,
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
    measured : MeasuredShifts, optional
        Joins the likelihood as independent data.
    rounds : int
        Gauss-Newton rounds; the spread is learned anew in each.
    threads : int
    progress : callable, optional
        Called with the finished share.

    Notes
    -----
    The spread maximises the marginal likelihood of all pixels by expectation
    maximisation on the quadratic form of each pixel's likelihood; a smooth change
    over the field is the mean that departures are drawn to. Source: A. P.
    Dempster, N. M. Laird, D. B. Rubin, J. R. Stat. Soc. B 39 (1977) 1; empirical
    Bayes, H. Robbins (1956).
    """
    counts = data.bins
    thresholds = levels_kev.size
    spread = prior_spread(thresholds)
    values = np.zeros((counts.shape[0], thresholds + 3))
    field = np.zeros_like(values)
    terms = field_terms(data.pixel, data.shape)
    ratio = np.ones(counts.shape[1:])
    lost = 2.0 * dead_time_ns * NS / data.count_time_s
    covariance = np.empty((0, 0, 0))
    parts: list[_Summary] = []
    for turn in range(rounds + 1):
        parts = []

        def block(
            first: int,
            now: NDArray[np.float64] = values,
            factor: NDArray[np.float64] = ratio,
        ) -> _Summary:
            rows = slice(first, first + CHUNK)
            return _summarise(
                counts[rows], tables, levels_kev, now[rows], factor, lost,
                data.count_time_s,
            )  # fmt: skip

        with ThreadPoolExecutor(threads) as pool:
            for done in pool.map(block, range(0, counts.shape[0], CHUNK)):
                parts.append(done)
                if progress is not None:
                    share = min(1.0, len(parts) * CHUNK / counts.shape[0])
                    progress((turn + share) / (rounds + 1))
        expected = sum((p.expected for p in parts), np.zeros_like(ratio))
        ratio = counts.sum(axis=0) / np.maximum(expected, 1e-9)
        if turn == rounds:
            break
        information = np.concatenate([p.information for p in parts])
        pull = np.concatenate([p.pull for p in parts])
        if measured is not None:
            measured.add_to(information, pull)
        # departures from the smooth field are what the spread draws to zero
        around = pull - np.matmul(information, field[..., None])[..., 0]
        spread = learned_spread(information, around, spread)
        values, covariance = posterior(information, around, spread)
        values += field
        # the average pixel has no departures: what all share belongs to the ratio
        values -= values.mean(axis=0)
        field = smooth_field(values, terms)
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
    pixels, size = values.shape
    information = np.empty((pixels, size, size))
    score = np.empty((pixels, size))
    deviance = np.empty(pixels)
    expected = np.zeros(ratio.shape)
    pixel_likelihood.summarise(
        counts, tables.curve, tables.by_rate, tables.by_variance,
        tables.by_dead_time, levels_kev, tables.step_kev, values, ratio, lost, time,
        information, score, deviance, expected,
    )  # fmt: skip
    pull = score + np.matmul(information, values[..., None])[..., 0]
    return _Summary(
        information=information, pull=pull, deviance=deviance, expected=expected
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
