"""Whether counts scatter as counts do: variance over mean across repeats."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

from spectral.scans.repeats import settings_with_repeats

if TYPE_CHECKING:
    from collections.abc import Collection

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

_FEWEST_COUNTS = 5.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Dispersion:
    """Variance over mean across the repeats of one setting.

    Attributes
    ----------
    exposures : tuple of int
    ratio : array, shape (threshold,)
        Of the middle one of the sound pixels; 1 for Poisson numbers. NaN where too
        little was counted.
    standard_error : array, shape (threshold,)
    expected : array, shape (threshold,)
        With the dead time that was measured; 1 if none was.
    outside : array, shape (threshold,)
        Share of sound pixels outside the 95 % limits of the chi-square law, which
        is scaled to the expected ratio; 0.05 is as it should be.
    """

    exposures: tuple[int, ...]
    ratio: NDArray[np.float64]
    standard_error: NDArray[np.float64]
    expected: NDArray[np.float64]
    outside: NDArray[np.float64]


def expected_ratio(
    counts: NDArray[np.float64], count_time_s: float, dead_time_ns: float
) -> NDArray[np.float64]:
    """Variance over mean of counts above thresholds, with paralysable dead time.

    Parameters
    ----------
    counts : array, shape (threshold,)
        Mean counts, lowest threshold first.
    count_time_s : float
    dead_time_ns : float

    Notes
    -----
    At the lowest threshold, with x = n tau for a true rate n, the ratio is
    1 - 2 x exp(-x); a higher threshold takes a share p of those pulses, so its
    ratio is 1 - p (2 x exp(-x)).
    Source: D. F. Yu, J. A. Fessler 2000, Phys. Med. Biol. 45, 2043, for the variance
    (from memory); the second step is the variance of a random selection.

    Examples
    --------
    >>> expected_ratio(np.array([9048.4, 4524.2]), 1e-3, 11.05171).round(3).tolist()
    [0.819, 0.909]
    """
    recorded = counts[0] / count_time_s * max(dead_time_ns, 0.0) * 1e-9
    lost = 2.0 * min(recorded, 0.36)  # x exp(-x) is what was recorded, times tau
    share = counts / max(counts[0], 1e-300)
    out: NDArray[np.float64] = 1.0 - lost * share
    return out


def dispersions(
    scan: Scan,
    sound: NDArray[np.bool_],
    *,
    dead_time_ns: float = 0.0,
    without: Collection[int] = (),
) -> list[Dispersion]:
    """Dispersion of every setting with a beam that was taken more than once.

    The detector's common ups and downs (a tube that flickers or drifts) are taken
    out first: each repeat is compared at its own mean level.

    Parameters
    ----------
    scan : Scan
    sound : array of bool, shape (row, column)
    dead_time_ns : float
        Dead time that explains a ratio below 1.
    without : collection of int
        Exposures to leave out.
    """
    found = []
    roles = ("open", "wedge", "object")
    for group in settings_with_repeats(scan, *roles, without=without):
        chi_square, mean = repeat_scatter(scan, group, sound)
        degrees = len(group) - 1
        if chi_square.shape[1] < 2:
            continue
        time = float(scan.count_time_s[group].mean())
        expected = expected_ratio(mean, time, dead_time_ns)
        ratio, error = _middle_ratio(chi_square, degrees)
        low, high = stats.chi2.ppf([0.025, 0.975], degrees)
        scaled = chi_square / expected[:, None]
        outside = np.mean((scaled < low) | (scaled > high), axis=1)
        enough = mean >= _FEWEST_COUNTS
        found.append(
            Dispersion(
                exposures=tuple(int(i) for i in group),
                ratio=np.where(enough, ratio, np.nan),
                standard_error=np.where(enough, error, np.nan),
                expected=expected,
                outside=np.where(enough, outside, np.nan),
            )
        )
    return found


def _middle_ratio(
    chi_square: NDArray[np.float64], degrees: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Median over pixels in units of the law's median, and its standard error.

    The median of P numbers with density f has the variance 1 / (4 P f^2).
    """
    middle = stats.chi2.median(degrees)
    ratio = np.median(chi_square, axis=1) / middle
    density = stats.chi2.pdf(middle, degrees)
    error = ratio / (2.0 * middle * density * np.sqrt(chi_square.shape[1]))
    return ratio, error


def repeat_scatter(
    scan: Scan, group: NDArray[np.int64], sound: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Chi-square of each pixel's repeats about its own mean, and the mean counts.

    Parameters
    ----------
    scan : Scan
    group : array of int
        Exposures of one setting.
    sound : array of bool, shape (row, column)

    Returns
    -------
    chi_square : array, shape (threshold, pixel)
        Of the sound pixels in order; 0 for one whose counts cannot be.
    mean : array, shape (threshold,)
        Over the sound pixels and the repeats.
    """
    total, square, level = _sums(scan, group, sound)
    weight = level.sum(axis=0)
    chi_square = square * weight[:, None] / np.maximum(total, 1.0) - total
    return np.maximum(chi_square, 0.0), weight / len(group)


def _sums(
    scan: Scan, group: NDArray[np.int64], sound: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Sum of N and of N^2/s per pixel, and each repeat's level s per threshold.

    With the pixel's mean m = sum N / sum s, the chi-square about s m is
    sum N^2 / (s m) - sum N, so one pass suffices.
    """
    k = scan.shape[1]
    pixels = int(sound.sum())
    total, square = np.zeros((k, pixels)), np.zeros((k, pixels))
    level = np.zeros((len(group), k))
    usable = np.ones(pixels, bool)
    for i, exposure in enumerate(group):
        counts = scan.counts.read([int(exposure)])[0][:, sound]
        usable &= (counts < scan.count_limit).all(axis=0)
        level[i] = np.maximum(np.where(usable, counts, 0).mean(axis=1), 1e-9)
        total += counts
        square += counts.astype(np.float64) ** 2 / level[i][:, None]
    return np.where(usable, total, 0.0), np.where(usable, square, 0.0), level
