"""Pixels that should not be used, each with its reasons."""

from __future__ import annotations

import enum
from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

from spectral.scans.bad_lines import line_stretches
from spectral.scans.counts_faults import count_faults
from spectral.scans.dispersion import repeat_scatter
from spectral.scans.pixel_series import FALSE_ALARM, scatter, too_scattered
from spectral.scans.repeats import setting_numbers, settings_with_repeats

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

_FAULTY_SHARE = 0.1
_NOTHING = 0.05
_FEWEST_COUNTS = 20.0
_OUTLIER_DEVIATIONS = 6.0
_POLISH_ROUNDS = 4
_MOST_BYTES = 1 << 29
_REPEATS_AGREE = 1.5


class PixelReason(enum.IntFlag):
    """Why a pixel should not be used; bits add up, 0 means sound."""

    SOUND = 0
    MASKED = 1
    DEAD = 2
    STUCK = 4
    NOISY = 8
    UNSTABLE = 16
    PARTIAL_COLUMN = 32
    COUNT_FAULT = 64
    ODD_RESPONSE = 128
    MISFIT = 256


REASON_MEANING: dict[PixelReason, str] = {
    PixelReason.MASKED: "the scan's own pixel mask excludes it",
    PixelReason.DEAD: "it counts nothing, or nearly nothing, in the open beam",
    PixelReason.STUCK: "it gives the same number whatever the exposure",
    PixelReason.NOISY: "it counts in the dark",
    PixelReason.UNSTABLE: "its counts scatter more than counting allows",
    PixelReason.PARTIAL_COLUMN: "it lies in a stretch of a line that fails together",
    PixelReason.COUNT_FAULT: "too many of its counts cannot be",
    PixelReason.ODD_RESPONSE: "it counts far more or less than its surroundings",
    PixelReason.MISFIT: "no response fits its counts behind the wedge steps",
}


def commonest_reason(reasons: NDArray[np.uint16]) -> str:
    """What the reason that most bad pixels have means; "" if none is bad."""
    if not np.any(reasons):
        return ""
    number = {m: np.count_nonzero(reasons & r) for r, m in REASON_MEANING.items()}
    return max(number, key=lambda meaning: int(number[meaning]))


def find_bad_pixels(
    scan: Scan, *, object_repeats: bool = False, most_bytes: int = _MOST_BYTES
) -> NDArray[np.uint16]:
    """Reasons not to use each pixel, from a scan's dark, open and wedge exposures.

    The scan of an object will do if it holds dark and open exposures; the more
    exposures, the more is found.

    Parameters
    ----------
    scan : Scan
        Of a scan whose counts are too many, exposures spread evenly over it are read.
    object_repeats : bool
        Whether to look at repeated exposures of an object too. They count only if
        most pixels repeat to within counting noise, and a pixel among changing
        neighbours is left alone: there, something may have moved.
    most_bytes : int
        Of counts to read, by default half a GiB; three times that is in use at once.

    Returns
    -------
    array of uint16, shape (row, column)
        Bits of `PixelReason`.
    """
    _, k, y, x = scan.shape
    reasons = np.zeros(y * x, np.uint16)
    _mark(reasons, scan.pixel_mask.reshape(-1) != 0, PixelReason.MASKED)
    which = exposures_to_look_at(scan, most_bytes)
    if len(which) == 0:
        return reasons.reshape(y, x)
    counts = scan.counts.read(which).reshape(len(which), k, -1)
    beam = np.array([scan.role[i] != "dark" for i in which])
    limit = scan.count_limit
    faulty = np.concatenate([count_faults(c[None], count_limit=limit) for c in counts])
    faulty = faulty != 0
    _mark(reasons, faulty.mean(0) > _FAULTY_SHARE, PixelReason.COUNT_FAULT)
    _mark(reasons, _stuck(counts, beam), PixelReason.STUCK)
    if not beam.all():
        _mark(reasons, _noisy(counts[~beam]), PixelReason.NOISY)
    if beam.any():
        lit = counts[beam]
        _mark(reasons, _dead(lit), PixelReason.DEAD)
        groups = setting_numbers(scan, which[beam])
        unstable = unstable_pixels(lit, ~faulty[beam], reasons == 0, groups)
        _mark(reasons, unstable, PixelReason.UNSTABLE)
        bright = counts[_brightest(scan, which, beam)].sum(0, dtype=np.float64)
        usable = (reasons == 0).reshape(y, x)
        odd = _odd_response(bright.reshape(k, y, x), usable)
        _mark(reasons, odd.reshape(-1), PixelReason.ODD_RESPONSE)
    if object_repeats:
        moved = _unstable_in_objects(scan, (reasons == 0).reshape(y, x))
        _mark(reasons, moved.reshape(-1), PixelReason.UNSTABLE)
    failing = PixelReason.DEAD | PixelReason.UNSTABLE | PixelReason.ODD_RESPONSE
    stretches = line_stretches((reasons & failing != 0).reshape(y, x))
    _mark(reasons, stretches.reshape(-1), PixelReason.PARTIAL_COLUMN)
    return reasons.reshape(y, x)


def _mark(
    reasons: NDArray[np.uint16], where: NDArray[np.bool_], reason: PixelReason
) -> None:
    reasons[where] |= np.uint16(reason)


def exposures_to_look_at(
    scan: Scan, most_bytes: int = _MOST_BYTES
) -> NDArray[np.int64]:
    """Dark, open and wedge exposures, as many as so many bytes hold."""
    which = scan.exposures("dark", "open", "wedge")
    _, k, y, x = scan.shape
    most = max(8, most_bytes // (4 * k * y * x))
    if len(which) > most:
        which = which[np.linspace(0, len(which) - 1, most).astype(np.int64)]
    return which


def _brightest(
    scan: Scan, which: NDArray[np.int64], beam: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """The open exposures; if there are none, all with a beam."""
    open_beam = np.array([scan.role[i] == "open" for i in which])
    return open_beam if open_beam.any() else beam


def _stuck(counts: NDArray[np.uint32], beam: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Pixels with one number, not zero, in exposures that differ for all others.

    Parameters
    ----------
    counts : array, shape (exposure, threshold, pixel)
    beam : array of bool, shape (exposure,)
    """
    out = np.zeros(counts.shape[2], bool)
    for k in range(counts.shape[1]):
        level = np.median(counts[:, k], axis=1)
        apart = level.max() - level.min() > 10 * np.sqrt(level.max() + 1)
        if len(beam) > 1 and apart:
            same = counts[:, k].max(0) == counts[:, k].min(0)
            out |= same & (counts[0, k] > 0)
    return out


def _noisy(dark: NDArray[np.uint32]) -> NDArray[np.bool_]:
    """Pixels that count more in the dark than their like.

    Parameters
    ----------
    dark : array, shape (exposure, threshold, pixel)

    Notes
    -----
    The mean is that of a Poisson law with the share of empty pixels that is seen,
    or the middle value where few are empty: neither minds a few noisy pixels.
    """
    total = dark.sum(axis=0, dtype=np.int64)
    out = np.zeros(total.shape[1], bool)
    for one in total:
        empty = float(np.mean(one == 0))
        mean = -np.log(empty) if empty > 0.5 else float(np.median(one))
        spread = 1.4826 * float(np.median(np.abs(one - np.median(one))))
        limit = stats.poisson.isf(FALSE_ALARM / len(total), max(mean, 1e-9))
        out |= one > max(limit, mean + _OUTLIER_DEVIATIONS * spread)
    return out


def _dead(lit: NDArray[np.uint32]) -> NDArray[np.bool_]:
    """Pixels that count next to nothing where the others count plenty.

    Parameters
    ----------
    lit : array, shape (exposure, threshold, pixel)
        Exposures with a beam.
    """
    total = lit.sum(axis=0, dtype=np.float64)
    level = np.median(total, axis=1)
    out = np.zeros(total.shape[1], bool)
    if level[0] >= _FEWEST_COUNTS / _NOTHING:
        out |= total[0] < _NOTHING * level[0]
    for one, usual in zip(total, level, strict=True):
        if usual >= _FEWEST_COUNTS:
            out |= one == 0
    return out


def unstable_pixels(
    lit: NDArray[np.uint32],
    valid: NDArray[np.bool_],
    sound: NDArray[np.bool_],
    groups: NDArray[np.int64],
) -> NDArray[np.bool_]:
    """Pixels whose counts scatter more than counting allows, at any threshold.

    Parameters
    ----------
    lit : array, shape (exposure, threshold, pixel)
        Exposures with a beam.
    valid : array of bool, shape (exposure, pixel)
        Where the counts can be.
    sound : array of bool, shape (pixel,)
        Pixels with no other fault; they set the scale.
    groups : array of int, shape (exposure,)
        Exposures of one setting share a number.
    """
    out = np.zeros(lit.shape[2], bool)
    thresholds = lit.shape[1]
    for k in range(thresholds):
        chi_square, degrees = scatter(lit[:, k], valid, sound, groups)
        out |= too_scattered(
            chi_square, degrees, sound, chance=FALSE_ALARM / thresholds
        )
    return out


def _unstable_in_objects(scan: Scan, sound: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Single pixels and lines that scatter where the object's repeats agree."""
    out = np.zeros(sound.shape, bool)
    for group in settings_with_repeats(scan, "object", fewest=3):
        chi_square, _ = repeat_scatter(scan, group, sound)
        degrees = len(group) - 1
        usual = np.median(chi_square, axis=1) / stats.chi2.median(degrees)
        if np.any(usual > _REPEATS_AGREE):
            continue
        chance = FALSE_ALARM / len(usual)
        everyone = np.ones(chi_square.shape[1], bool)
        failing = np.zeros(sound.shape, bool)
        for one in chi_square:
            failing[sound] |= too_scattered(one, degrees, everyone, chance=chance)
        beside = _neighbours(failing, 1) & _neighbours(failing, 0)
        out |= failing & ~beside
    return out


def _neighbours(failing: NDArray[np.bool_], axis: int) -> NDArray[np.bool_]:
    """Whether a pixel's neighbour along an axis fails."""
    padded = np.pad(np.moveaxis(failing, axis, 0), ((1, 1), (0, 0)))
    return np.moveaxis(padded[:-2] | padded[2:], 0, axis)


def _odd_response(
    image: NDArray[np.float64], usable: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Pixels far from what their row and column count.

    Rows and columns keep factors of their own (a median polish), for pixels at the
    border of a chip are larger, the beam is brighter on one side, and neither is a
    fault.

    Parameters
    ----------
    image : array, shape (threshold, row, column)
    usable : array of bool, shape (row, column)

    Notes
    -----
    Source: J. W. Tukey 1977, Exploratory Data Analysis, ch. 11 (median polish; from
    memory).
    """
    out = np.zeros(usable.shape, bool)
    for one in image:
        left = np.where(usable, np.log(one + 0.5), np.nan)
        if np.count_nonzero(usable) < 16 or np.nanmedian(left) < np.log(_FEWEST_COUNTS):
            continue
        for _ in range(_POLISH_ROUNDS):
            for axis in (0, 1):
                left -= _middle(left, axis)
        noise = np.sqrt(1.0 / (one + 0.5))
        spread = 1.4826 * np.nanmedian(np.abs(left))
        limit = _OUTLIER_DEVIATIONS * np.maximum(spread, noise)
        out |= usable & (np.abs(np.nan_to_num(left)) > limit)
    return out


def _middle(values: NDArray[np.float64], axis: int) -> NDArray[np.float64]:
    """Median along an axis; 0 where all is NaN."""
    empty = np.isnan(values).all(axis=axis, keepdims=True)
    filled = np.where(empty, 0.0, values)
    middle: NDArray[np.float64] = np.nanmedian(filled, axis=axis, keepdims=True)
    return middle
