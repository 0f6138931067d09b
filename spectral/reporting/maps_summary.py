"""What a report says about maps, gathered in one pass over the exposures."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import norm

from spectral.scans.flags import MEANING, PixelFlag

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.reporting.maps_blocks import MapsBlocks
    from spectral.scans.maps import Maps

DEVIANCE_EDGES = np.linspace(0.0, 20.0, 2001)
_QUARTILES = (25.0, 50.0, 75.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MapsSummary:
    """Maps of n exposures as one picture, and what happened in each exposure.

    Attributes
    ----------
    material : tuple of str, length m
    exposure : array, shape (n,)
    density : array, shape (m, y, x), in g/cm2
        Mean of the finite estimates.
    estimates : array of int, shape (m, y, x)
        How many went into it.
    single_error, mean_error : arrays, shape (m, y, x), in g/cm2
        Reported standard deviation of one exposure (root mean square), and of the
        mean.
    calibration_error : array, shape (m, y, x), in g/cm2
    scatter : array, shape (m, y, x), in g/cm2
        Standard deviation between exposures; NaN with fewer than two.
    correlation : array, shape (m, m)
        Median over pixels of the error correlation in a single exposure.
    flags : array of uint16, shape (y, x)
        Flags set in any exposure.
    flagged_estimates : dict of PixelFlag to int
        Pixels times exposures.
    deviance : array, shape (y, x)
        Mean per degree of freedom.
    deviance_counts : array of int, shape (edge - 1,)
        Histogram of all finite deviances of unflagged estimates, `DEVIANCE_EDGES`;
        what lies beyond is in the last.
    quartiles : array, shape (n, m, 3), in g/cm2
        Of the pixels of each exposure.
    flagged_share, exposure_deviance : arrays, shape (n,)
        Share of the pixels with a flag; median deviance.
    process : dict of str
    """

    material: tuple[str, ...]
    exposure: NDArray[np.int32]
    density: NDArray[np.float64]
    estimates: NDArray[np.int64]
    single_error: NDArray[np.float64]
    mean_error: NDArray[np.float64]
    calibration_error: NDArray[np.float64]
    scatter: NDArray[np.float64]
    correlation: NDArray[np.float64]
    flags: NDArray[np.uint16]
    flagged_estimates: dict[PixelFlag, int]
    deviance: NDArray[np.float64]
    deviance_counts: NDArray[np.int64]
    quartiles: NDArray[np.float64]
    flagged_share: NDArray[np.float64]
    exposure_deviance: NDArray[np.float64]
    process: dict[str, str]

    @property
    def sound_share(self) -> float:
        """Share of the pixels that no exposure flags."""
        return float(np.mean(self.flags == 0))

    def deviance_percentile(self, percent: float) -> float:
        """Percentile of the unflagged deviances, to the histogram's resolution."""
        total = np.cumsum(self.deviance_counts)
        if total[-1] == 0:
            return float("nan")
        at = int(np.searchsorted(total, 0.01 * percent * total[-1]))
        return float(0.5 * (DEVIANCE_EDGES[at] + DEVIANCE_EDGES[at + 1]))


def summarise(blocks: MapsBlocks) -> MapsSummary:
    """Summary of maps, holding a few exposures in memory at a time."""
    sums: _Sums | None = None
    for maps in blocks:
        if sums is None:
            sums = _Sums(maps)
        sums.add(maps)
    if sums is None:  # MapsBlocks refuses maps without exposures
        raise AssertionError
    return sums.summary(blocks.exposure)


class _Sums:
    """Running sums over exposures."""

    def __init__(self, first: Maps) -> None:
        _, m, y, x = first.areal_density.shape
        self.material = first.material
        self.process = first.process
        self.shift = np.nan_to_num(first.areal_density[0].astype(np.float64))
        self.total = np.zeros((m, y, x))
        self.squares = np.zeros((m, y, x))
        self.estimates = np.zeros((m, y, x), np.int64)
        self.variance = np.zeros((m, y, x))
        self.calibration = np.zeros((m, y, x))
        self.flags = np.zeros((y, x), np.uint16)
        self.flagged = dict.fromkeys(MEANING, 0)
        self.deviance = np.zeros((y, x))
        self.deviances = np.zeros((y, x), np.int64)
        self.histogram = np.zeros(DEVIANCE_EDGES.size - 1, np.int64)
        self.quartiles: list[NDArray[np.float64]] = []
        self.flagged_share: list[float] = []
        self.median_deviance: list[float] = []
        self.correlation = np.eye(m)
        self._correlate(first)

    def add(self, maps: Maps) -> None:
        """Take a block in."""
        for i in range(len(maps.exposure)):
            self._add_estimates(
                maps.areal_density[i], maps.areal_density_errors[i],
                maps.calibration_errors[i],
            )  # fmt: skip
            self._add_verdicts(maps.flags[i], maps.deviance[i])

    def _add_estimates(
        self,
        density: NDArray[np.float32],
        error: NDArray[np.float32],
        calibration: NDArray[np.float32],
    ) -> None:
        finite = np.isfinite(density)
        departure = np.where(finite, density - self.shift, 0.0)
        self.total += departure
        self.squares += departure**2
        self.estimates += finite
        self.variance += np.where(finite, error.astype(np.float64) ** 2, 0.0)
        self.calibration += np.where(finite, calibration.astype(np.float64) ** 2, 0.0)
        self.quartiles.append(
            np.array([_percentiles(d[f]) for d, f in zip(density, finite, strict=True)])
        )

    def _add_verdicts(
        self, flags: NDArray[np.uint16], deviance: NDArray[np.float32]
    ) -> None:
        self.flags |= flags
        for flag in self.flagged:
            self.flagged[flag] += int(np.count_nonzero(flags & int(flag)))
        finite = np.isfinite(deviance)
        self.deviance += np.where(finite, deviance, 0.0)
        self.deviances += finite
        good = deviance[finite & (flags == 0)]
        top = 0.5 * (DEVIANCE_EDGES[-1] + DEVIANCE_EDGES[-2])
        counts, _ = np.histogram(np.clip(good, 0.0, top), DEVIANCE_EDGES)
        self.histogram += counts
        self.flagged_share.append(float(np.mean(flags != 0)))
        self.median_deviance.append(float(np.median(good)) if good.size else np.nan)

    def _correlate(self, maps: Maps) -> None:
        """Error correlation in the first exposure."""
        m = len(self.material)
        error = maps.areal_density_errors[0]
        for place, (i, j) in enumerate(zip(*np.triu_indices(m), strict=True)):
            if i == j:
                continue
            with np.errstate(invalid="ignore", divide="ignore"):
                ratio = maps.covariance[0, place] / (error[i] * error[j])
            finite = ratio[np.isfinite(ratio)]
            value = float(np.median(finite)) if finite.size else np.nan
            self.correlation[i, j] = self.correlation[j, i] = value

    def summary(self, exposure: NDArray[np.int32]) -> MapsSummary:
        """All that was gathered."""
        with np.errstate(invalid="ignore", divide="ignore"):
            n = np.where(self.estimates > 0, self.estimates, np.nan)
            mean = self.total / n
            spread = np.maximum(self.squares / n - mean**2, 0.0) * n / (n - 1.0)
            spread = np.where(self.estimates > 1, spread, np.nan)
            return MapsSummary(
                material=self.material,
                exposure=exposure,
                density=self.shift + mean,
                estimates=self.estimates,
                single_error=np.sqrt(self.variance / n),
                mean_error=np.sqrt(self.variance) / n,
                calibration_error=np.sqrt(self.calibration / n),
                scatter=np.sqrt(spread),
                correlation=self.correlation,
                flags=self.flags,
                flagged_estimates=self.flagged,
                deviance=self.deviance
                / np.where(self.deviances > 0, self.deviances, np.nan),
                deviance_counts=self.histogram,
                quartiles=np.array(self.quartiles),
                flagged_share=np.array(self.flagged_share),
                exposure_deviance=np.array(self.median_deviance),
                process=self.process,
            )


def _percentiles(values: NDArray[np.float32]) -> NDArray[np.float64]:
    if values.size == 0:
        return np.full(len(_QUARTILES), np.nan)
    return np.asarray(np.percentile(values.astype(np.float64), _QUARTILES))


def median(values: NDArray[np.floating]) -> float:
    """Median of the finite values; NaN if there is none."""
    finite = values[np.isfinite(values)]
    return float(np.median(finite)) if finite.size else float("nan")


def middle_range(density: NDArray[np.float64]) -> tuple[float, float]:
    """The fifth and the ninety-fifth percentile of the finite values."""
    finite = density[np.isfinite(density)]
    if finite.size == 0:
        return float("nan"), float("nan")
    low, high = np.percentile(finite, [5.0, 95.0])
    return float(low), float(high)


def quartile_errors(
    density: NDArray[np.float64], error: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Standard deviation by counting of the quartiles over pixels of one exposure.

    Parameters
    ----------
    density, error : array, shape (row, column), in g/cm2
        Mean estimate and error of a single exposure of every pixel.

    Returns
    -------
    array, shape (3,), in g/cm2
        NaN without pixels.

    Notes
    -----
    Pixel i lies below the quartile q with probability p_i = Phi((q - mu_i) / s_i). The
    share below q has the variance sum p_i (1 - p_i) and changes with q by the sum of
    the pixels' densities at q; the quotient of the two is the error to first order.
    Source: for equal pixels, M. G. Kendall and A. Stuart, The Advanced Theory of
    Statistics, vol. 1 (London 1963), the error of quantiles (from memory).
    """
    usable = np.isfinite(density) & np.isfinite(error) & (error > 0.0)
    if not usable.any():
        return np.full(len(_QUARTILES), np.nan)
    middle, width = density[usable], error[usable]
    found = np.empty(len(_QUARTILES))
    for i, quartile in enumerate(np.percentile(middle, _QUARTILES)):
        place = (quartile - middle) / width
        below = norm.cdf(place)
        found[i] = np.sqrt(np.sum(below * (1.0 - below)))
        found[i] /= np.sum(norm.pdf(place) / width)
    return found
