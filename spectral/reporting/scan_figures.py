"""Figures that a report draws out of a scan and its check."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting.wording import number, percent, with_error
from spectral.scans.stored_counts import NOT_A_COUNT

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.scans.counting_loss import CountingLoss
    from spectral.scans.scan import Scan


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ScanFigures:
    """What a scan counts, over its sound pixels.

    Attributes
    ----------
    median : array, shape (exposure, threshold)
        Median counts of a sound pixel.
    mean : array, shape (exposure, threshold)
    per_mas : array, shape (exposure, threshold), in 1/(mA s)
        Mean over current and time; over time alone where the scan gives no current
        or it is zero.
    open_rate, dark_rate : array, shape (row, column), in 1/s, or None
        Above the lowest threshold: mean of the brightest setting's open exposures,
        and of the dark exposures.
    """

    median: NDArray[np.float64]
    mean: NDArray[np.float64]
    per_mas: NDArray[np.float64]
    open_rate: NDArray[np.float64] | None
    dark_rate: NDArray[np.float64] | None


def scan_figures(scan: Scan, sound: NDArray[np.bool_]) -> ScanFigures:
    """Figures of a scan, one exposure in memory at a time.

    Parameters
    ----------
    scan : Scan
    sound : array of bool, shape (row, column)
        Pixels to count in; all, if none is sound.
    """
    sound = sound if sound.any() else np.ones_like(sound)
    n, k = scan.shape[:2]
    middle, mean = np.zeros((n, k)), np.zeros((n, k))
    for i in range(n):
        counts = scan.counts.read([i])[0][:, sound].astype(np.float64)
        counts[counts == NOT_A_COUNT] = np.nan
        usable = np.isfinite(counts).any(axis=1)
        middle[i], mean[i] = np.nan, np.nan
        middle[i, usable] = np.nanmedian(counts[usable], axis=1)
        mean[i, usable] = np.nanmean(counts[usable], axis=1)
    charge = scan.count_time_s.copy()
    if scan.current_ma is not None:
        charge = charge * np.where(scan.current_ma > 0.0, scan.current_ma, 1.0)
    return ScanFigures(
        median=middle,
        mean=mean,
        per_mas=mean / charge[:, None],
        open_rate=_rate(scan, brightest_opens(scan, mean)),
        dark_rate=_rate(scan, scan.exposures("dark")),
    )


def brightest_opens(scan: Scan, mean: NDArray[np.float64]) -> NDArray[np.int64]:
    """Open exposures of the brightest setting of current and count time."""
    opens = scan.exposures("open")
    if opens.size == 0 or not np.isfinite(mean[opens, 0]).any():
        return opens[:0]
    best = int(opens[np.nanargmax(mean[opens, 0])])
    same = scan.count_time_s[opens] == scan.count_time_s[best]
    if scan.current_ma is not None:
        same &= scan.current_ma[opens] == scan.current_ma[best]
    return np.asarray(opens[same])


def _rate(scan: Scan, which: NDArray[np.int64]) -> NDArray[np.float64] | None:
    """Counts per second above the lowest threshold."""
    if which.size == 0:
        return None
    total = np.zeros(scan.shape[2:])
    for i in which:
        counts = scan.counts.read([int(i)])[0, 0].astype(np.float64)
        total += np.where(counts == NOT_A_COUNT, np.nan, counts)
    return np.asarray(total / scan.count_time_s[which].sum())


def attenuations(
    scan: Scan, figures: ScanFigures
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Logarithm of open over wedge counts, per current and time.

    Returns
    -------
    exposure : array, shape (step,)
        Wedge exposures that count something at every threshold.
    attenuation : array, shape (step, threshold)
    """
    opens = brightest_opens(scan, figures.mean)
    wedge = scan.exposures("wedge")
    if opens.size == 0 or wedge.size == 0:
        return wedge[:0], np.empty((0, scan.shape[1]))
    wedge = wedge[(figures.mean[wedge] > 0.0).all(axis=1)]
    level = figures.per_mas[opens].mean(axis=0)
    if not (level > 0.0).all():
        return wedge[:0], np.empty((0, scan.shape[1]))
    return wedge, -np.log(figures.per_mas[wedge] / level)


def loss_sentence(loss: CountingLoss) -> str:
    """Dead time and loss; a loss that the dead time's error covers is not called one.

    The counts above the lowest threshold fall by dead time and rise by pulses that
    pile up over it, so what is left may be zero, or less.
    """
    rate = f"{number(loss.highest_rate_per_s)} counts per second and pixel"
    dead = f"{with_error(loss.median_ns, loss.standard_error_ns)} ns"
    if loss.is_seen:
        lost = f"{percent(loss.loss)} of the pulses are lost at {rate}"
        return f"dead time {dead} above the lowest threshold: {lost}"
    return (
        "the counts above the lowest threshold rise with the tube current as they "
        f"would without dead time ({dead}), up to {rate}"
    )


def middle_half_width(values: NDArray[np.float64]) -> float:
    """Half the width of the middle 68 % of the finite values."""
    finite = values[np.isfinite(values)]
    if finite.size == 0:
        return float("nan")
    low, high = np.percentile(finite, [15.87, 84.13])
    return float(0.5 * (high - low))
