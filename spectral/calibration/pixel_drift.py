"""What each pixel did by itself since a calibration."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.drift_spread import (
    CLASSES,
    class_of,
    drift_variance,
    updated,
)
from spectral.calibration.pixel_fit import CHUNK, NS
from spectral.forward.pixel_response import curve_tables
from spectral.kernels import pixel_likelihood

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.calibration.wedge_data import WedgeData
    from spectral.forward.pixel_response import CurveTables


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PixelDrift:
    """Departures of pixels after a drift, and how far pixels drift.

    Attributes
    ----------
    values : array, shape (pixel, parameter)
        Posterior means; their mean over the pixels is that of the calibration.
    covariance : array of float32, shape (pixel, parameter, parameter)
    spread, spread_error : arrays, shape (4,)
        Standard deviation of the drift between pixels for each of
        `drift_spread.CLASSES`, and its standard error; an upper bound where the spread
        is 0.
    deviance : array, shape (pixel,)
        Per degree of freedom, of the scan's counts at the new values.
    """

    values: NDArray[np.float64]
    covariance: NDArray[np.float32]
    spread: NDArray[np.float64]
    spread_error: NDArray[np.float64]
    deviance: NDArray[np.float64]


def pixel_drift(
    calibration: Calibration,
    data: WedgeData,
    output: NDArray[np.float64],
    *,
    rounds: int = 3,
    threads: int = 2,
) -> PixelDrift:
    """Departures of each pixel from a scan, with a calibration as the prior.

    Parameters
    ----------
    calibration : Calibration
        Moved already by what all pixels did together.
    data : WedgeData
    output : array, shape (exposure,)
        Of the tube, over the calibration's.
    rounds : int
        Gauss-Newton rounds; the spread of the drift is learned anew in each.
    threads : int

    Notes
    -----
    The prior of a pixel is normal about its calibrated departures, with their posterior
    covariance plus the drift's variance, one number for each of
    `drift_spread.CLASSES`, which maximises the marginal likelihood of all pixels. A
    factor for each exposure and bin keeps what all pixels share out of them. Source:
    empirical Bayes, H. Robbins (1956); variance components by scoring, H. D.
    Patterson, R. Thompson, Biometrika 58 (1971) 545.
    """
    size = len(calibration.parameter_names)
    start = calibration.departures.reshape(-1, size)[data.pixel]
    own = calibration.departure_covariance.reshape(-1, size, size)[data.pixel]
    largest = _by_class(np.diag(calibration.spread))
    likelihood = _Likelihood.build(calibration, data, output, threads=threads)
    values, covariance = start.copy(), own.copy()
    variance, error = 1e-4 * largest, np.zeros(len(CLASSES))
    ratio = likelihood.ratio(values)
    for _ in range(rounds):
        seen = likelihood.at(values, ratio)
        variance, error = drift_variance(
            seen.information, seen.pull, start, own, variance, largest
        )
        for first in range(0, start.shape[0], CHUNK):
            part = slice(first, first + CHUNK)
            values[part], covariance[part] = updated(
                seen.information[part], seen.pull[part], start[part],
                own[part].astype(np.float64), variance,
            )  # fmt: skip
        values += (start - values).mean(axis=0)
        ratio = likelihood.ratio(values)
    spread = np.sqrt(variance)
    by_first_order = error / np.maximum(2.0 * spread, 1e-12)
    return PixelDrift(
        values=values,
        covariance=covariance,
        spread=spread,
        spread_error=np.minimum(by_first_order, np.sqrt(error)),
        deviance=likelihood.at(values, ratio).deviance,
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Seen:
    """Quadratic form of each pixel's log-likelihood, and its deviance."""

    information: NDArray[np.float64]
    pull: NDArray[np.float64]
    deviance: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Likelihood:
    """Counts of pixels, with what is needed to expect them."""

    counts: NDArray[np.float64]
    tables: CurveTables
    levels_kev: NDArray[np.float64]
    lost: NDArray[np.float64]
    time: NDArray[np.float64]
    threads: int

    @classmethod
    def build(
        cls,
        calibration: Calibration,
        data: WedgeData,
        output: NDArray[np.float64],
        *,
        threads: int,
    ) -> _Likelihood:
        rate = calibration.photons_per_mas * data.current_ma * output
        return cls(
            counts=data.bins,
            tables=curve_tables(calibration.model, data.areal_density, rate),
            levels_kev=calibration.levels_kev,
            lost=2.0 * calibration.dead_time_ns * NS / data.count_time_s,
            time=data.count_time_s,
            threads=threads,
        )

    def ratio(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Counts over expected counts of all pixels, shape (exposure, bin)."""
        tables = self.tables
        shape = self.counts.shape[1:]

        def block(first: int) -> NDArray[np.float64]:
            expected = np.zeros(shape)
            pixel_likelihood.add_expected(
                tables.curve, tables.by_rate, tables.by_variance, tables.by_dead_time,
                self.levels_kev, tables.step_kev, values[first : first + CHUNK],
                self.time, expected,
            )  # fmt: skip
            return expected

        with ThreadPoolExecutor(self.threads) as pool:
            expected = sum(
                pool.map(block, range(0, values.shape[0], CHUNK)), np.zeros(shape)
            )
        return np.asarray(self.counts.sum(axis=0) / np.maximum(expected, 1e-9))

    def at(self, values: NDArray[np.float64], ratio: NDArray[np.float64]) -> _Seen:
        """The likelihood near values of the departures."""
        pixels, size = values.shape
        information = np.empty((pixels, size, size))
        score = np.empty((pixels, size))
        deviance = np.empty(pixels)
        tables = self.tables

        def block(first: int) -> None:
            part = slice(first, first + CHUNK)
            pixel_likelihood.summarise(
                self.counts[part], tables.curve, tables.by_rate, tables.by_variance,
                tables.by_dead_time, self.levels_kev, tables.step_kev, values[part],
                ratio, self.lost, self.time, information[part], score[part],
                deviance[part], np.zeros(ratio.shape),
            )  # fmt: skip

        with ThreadPoolExecutor(self.threads) as pool:
            list(pool.map(block, range(0, pixels, CHUNK)))
        pull = score + (information @ values[..., None])[..., 0]
        return _Seen(information=information, pull=pull, deviance=deviance)


def _by_class(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean of a value of each departure over its class."""
    which = class_of(values.size)
    return np.array([values[which == c].mean() for c in range(len(CLASSES))])
