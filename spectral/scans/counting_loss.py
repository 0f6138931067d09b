"""Counts lost at high rate, from open exposures at several tube currents."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.repeats import usable_exposures

if TYPE_CHECKING:
    from collections.abc import Collection

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

_FEWEST_COUNTS = 20.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CountingLoss:
    """Dead time at the lowest threshold, pixel by pixel.

    Attributes
    ----------
    dead_time_ns : array, shape (row, column), in ns
        NaN for pixels that were left out. Noise may make it negative.
    median_ns, standard_error_ns : float
        Of the sound pixels' median. The error holds the counting noise and, with
        three exposures or more, how unsteady the tube was.
    highest_rate_per_s : float
        Median counts per second in the brightest open exposure, as fitted.
    loss : float
        Share of the pulses lost there, by the median dead time; 0 where that is
        negative.
    """

    dead_time_ns: NDArray[np.float64]
    median_ns: float
    standard_error_ns: float
    highest_rate_per_s: float
    loss: float

    @property
    def is_seen(self) -> bool:
        """Whether the dead time exceeds 0 by two standard errors."""
        return self.median_ns > 2.0 * self.standard_error_ns


def counting_loss(
    scan: Scan, sound: NDArray[np.bool_], *, without: Collection[int] = ()
) -> CountingLoss | None:
    """Dead time of each pixel from open exposures, None without two currents.

    Parameters
    ----------
    scan : Scan
    sound : array of bool, shape (row, column)
    without : collection of int
        Exposures to leave out.

    Notes
    -----
    With a rate k I of pulses at current I, a paralysable counter records
    m = k I exp(-k I tau), so ln(m / I) falls linearly with I by k tau: a straight
    line weighted by the counts, pixel by pixel. The tube's output is taken to be
    proportional to its current; where it is not, the departure passes for dead time.
    To first order in k I tau a non-paralysable counter gives the same.
    Source: G. F. Knoll, Radiation Detection and Measurement, ch. 4 (from memory).
    """
    if scan.current_ma is None:
        return None
    opens = usable_exposures(scan, "open", without=without)
    current = scan.current_ma[opens]
    opens, current = opens[current > 0], current[current > 0]
    if len(np.unique(current)) < 2:
        return None
    time = scan.count_time_s[opens]
    counts = scan.counts.read(opens)[:, 0].reshape(len(opens), -1)
    usable = sound.reshape(-1) & (counts < scan.count_limit).all(0)
    usable &= counts.min(axis=0) >= _FEWEST_COUNTS
    if not usable.any():
        return None
    lit = counts[:, usable].astype(np.float64)
    height = np.log(lit / (current * time)[:, None])
    slope, start, variance = _lines(current, height, lit)
    per_current = np.exp(start)
    dead = np.full(sound.size, np.nan)
    dead[usable] = -slope / per_current * 1e9
    median = float(np.median(dead[usable]))
    brightest = int(np.argmax(np.median(lit, axis=1) / time))
    true_rate = float(np.median(per_current) * current[brightest])
    kept = float(np.exp(-true_rate * max(median, 0.0) * 1e-9))
    noise = 1.253**2 * np.mean(variance / per_current**2) / usable.sum()
    common = (height - start - current[:, None] * slope).mean(axis=1)
    unsteady = _slope_variance(current, common) / np.median(per_current) ** 2
    error = 1e9 * np.sqrt(noise + unsteady)
    return CountingLoss(
        dead_time_ns=dead.reshape(sound.shape),
        median_ns=median,
        standard_error_ns=float(error),
        highest_rate_per_s=kept * true_rate,
        loss=1.0 - kept,
    )


def _slope_variance(x: NDArray[np.float64], residual: NDArray[np.float64]) -> float:
    """Variance of a line's slope from the scatter of its residuals; 0 of two points."""
    if len(x) < 3:
        return 0.0
    scatter = (residual**2).sum() / (len(x) - 2)
    return float(scatter / ((x - x.mean()) ** 2).sum())


def _lines(
    x: NDArray[np.float64], y: NDArray[np.float64], weight: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Slope, value at x = 0 and the slope's variance of weighted lines, per pixel.

    Parameters
    ----------
    x : array, shape (exposure,)
    y, weight : array, shape (exposure, pixel)
        The weight is the inverse variance of y.
    """
    total = weight.sum(axis=0)
    centre = x @ weight / total
    offset = x[:, None] - centre
    square = (weight * offset**2).sum(axis=0)
    slope = (weight * offset * y).sum(axis=0) / square
    start = (weight * y).sum(axis=0) / total - slope * centre
    return slope, start, 1.0 / square
