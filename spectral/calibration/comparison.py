"""What changed between two calibrations of one detector."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

from spectral.calibration.matching import calibrations_differ
from spectral.calibration.mean_change import MeanChange, mean_change
from spectral.errors import CalibrationError, ScanError
from spectral.scans.bad_pixels import PixelReason

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

FALSE_ALARM = 1e-3
"""Share of unchanged pixels that the limit calls changed."""
LEAST_SHARE = 1e-3
"""Directions known to less than this share of their prior do not count."""
_NORMAL = 1.4826
"""Standard deviation over median absolute deviation of a normal distribution."""
CHUNK = 4096


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class UnknownChange:
    """One unknown of tube and sensor in both calibrations, as it was fitted."""

    name: str
    old: float
    old_error: float
    new: float
    new_error: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CalibrationComparison:
    """What changed, over the pixels that are good in both calibrations.

    (y, x) pixels, K thresholds, q departures a pixel.

    Attributes
    ----------
    old, new : str
        Where each comes from, in words.
    thresholds_kev : array, shape (K,), in keV
        Nominal.
    change_kev : array, shape (K, y, x), in keV
        Change of each pixel's true threshold; NaN where it is not good in both.
    median_kev, median_error_kev : arrays, shape (K,), in keV
        Median of that over the pixels, and its standard error.
    spread_kev : array, shape (K,), in keV
        Robust standard deviation between pixels.
    expected_spread_kev : array, shape (K,), in keV
        The same if no pixel had changed: what the errors of both explain.
    area_percent : array, shape (y, x), in %
        Change of the pixels' area relative to the average pixel.
    area_spread_percent, expected_area_spread_percent : float, in %
    chi_square : array, shape (y, x)
        Of each pixel's change, all departures together, the mean change taken off.
    freedom : array of int64, shape (y, x)
        Its degrees of freedom.
    changed : array of bool, shape (y, x)
        Pixels that changed by more than their errors allow: chi-square beyond the
        limit that a share FALSE_ALARM of unchanged pixels exceeds.
    average : MeanChange
        Movement of the average pixel: thresholds, flux, noise, dead time.
    unknowns : tuple of UnknownChange
    newly_bad, recovered : array of uint16, shape (y, x)
        Reasons of pixels that were good and are no longer, and the former reasons of
        pixels that are good now.
    residual_percent : tuple of float
        Root mean square of what the mean counts miss, (old, new), in %.
    fixed_pattern : tuple of (array or None)
        Promised fixed pattern over the single-exposure error, (old, new).
    materials : tuple of str
    notes : tuple of str
    """

    old: str
    new: str
    thresholds_kev: NDArray[np.float64]
    change_kev: NDArray[np.float64]
    median_kev: NDArray[np.float64]
    median_error_kev: NDArray[np.float64]
    spread_kev: NDArray[np.float64]
    expected_spread_kev: NDArray[np.float64]
    area_percent: NDArray[np.float64]
    area_spread_percent: float
    expected_area_spread_percent: float
    chi_square: NDArray[np.float64]
    freedom: NDArray[np.int64]
    changed: NDArray[np.bool_]
    average: MeanChange
    unknowns: tuple[UnknownChange, ...]
    newly_bad: NDArray[np.uint16]
    recovered: NDArray[np.uint16]
    residual_percent: tuple[float, float]
    fixed_pattern: tuple[NDArray[np.float64] | None, NDArray[np.float64] | None]
    materials: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def both_good(self) -> NDArray[np.bool_]:
        """Pixels that are good in both, shape (row, column)."""
        return np.asarray(np.isfinite(self.area_percent))

    @property
    def by_chance(self) -> float:
        """Number of pixels to be called changed if none did."""
        return FALSE_ALARM * float(self.both_good.sum())

    @property
    def median_pull(self) -> NDArray[np.float64]:
        """Median change over its error, shape (threshold,)."""
        return np.asarray(self.median_kev / self.median_error_kev)

    @property
    def spread_ratio(self) -> NDArray[np.float64]:
        """Spread of the change over the expected one; near 1 if pixels stayed."""
        return np.asarray(self.spread_kev / self.expected_spread_kev)


def compare(
    old: Calibration,
    new: Calibration,
    *,
    names: tuple[str, str] = ("the old calibration", "the new calibration"),
) -> CalibrationComparison:
    """What changed from an old calibration to a new one.

    Parameters
    ----------
    old, new : Calibration
    names : (str, str)
        What errors call the old and the new one: their files, where they have any.

    Raises
    ------
    CalibrationError
        If they are not of the same pixels, thresholds, voltage, filters and
        materials, no pixel is good in both, or no movement turns one into the other.
    """
    differs = calibrations_differ(new, old)
    if differs:
        msg = (
            f"{names[1]} cannot be compared with {names[0]}: it {differs}; compare "
            "calibrations of one setting"
        )
        raise CalibrationError(msg)
    both = old.good & new.good
    if not both.any():
        msg = (
            f"no pixel is good in both {names[0]} and {names[1]}: there is nothing to "
            "compare; calibrate again from a scan with sound pixels"
        )
        raise CalibrationError(msg)
    try:
        average = mean_change(old, new)
    except ScanError as error:
        msg = (
            f"{names[1]} cannot be compared with {names[0]}: no small movement of the "
            "average pixel turns one into the other; are they of one detector, and "
            "both whole?"
        )
        raise CalibrationError(msg) from error
    change = new.departures[both] - old.departures[both]
    middle = np.median(change, axis=0)
    expected, chi_square, freedom = _expected(old, new, both, change - middle)
    spread = _NORMAL * np.median(np.abs(change - middle), axis=0)
    count = int(both.sum())
    at_random = np.sqrt(0.5 * np.pi / count) * spread[1:-2]
    limit = stats.chi2.isf(FALSE_ALARM, np.maximum(freedom, 1))

    def onto(values: NDArray[np.float64]) -> NDArray[np.float64]:
        out = np.full(both.shape, np.nan)
        out[both] = values
        return out

    changed = np.zeros(both.shape, bool)
    changed[both] = (chi_square > limit) & (freedom > 0)
    degrees = np.zeros(both.shape, np.int64)
    degrees[both] = freedom
    shifts = change[:, 1:-2] + average.shift_kev
    return CalibrationComparison(
        old=_named(old),
        new=_named(new),
        thresholds_kev=old.thresholds_kev,
        change_kev=np.stack([onto(s) for s in shifts.T]),
        median_kev=average.shift_kev + middle[1:-2],
        median_error_kev=np.hypot(average.shift_error_kev, at_random),
        spread_kev=spread[1:-2],
        expected_spread_kev=expected[1:-2],
        area_percent=onto(100.0 * np.expm1(change[:, 0] - middle[0])),
        area_spread_percent=float(100.0 * spread[0]),
        expected_area_spread_percent=float(100.0 * expected[0]),
        chi_square=onto(chi_square),
        freedom=degrees,
        changed=changed,
        average=average,
        unknowns=_unknowns(old, new),
        newly_bad=np.where(old.good, new.pixel_reasons, 0).astype(np.uint16),
        recovered=np.where(new.good, old.pixel_reasons, 0).astype(np.uint16),
        residual_percent=(_residual(old), _residual(new)),
        fixed_pattern=(_pattern(old), _pattern(new)),
        materials=tuple(m.name for m in new.materials),
        notes=_notes(old, new),
    )


def _expected(
    old: Calibration,
    new: Calibration,
    both: NDArray[np.bool_],
    change: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
    """Spread of the change if no pixel changed; chi-square and freedom of each.

    Notes
    -----
    Two posterior means with covariances A and B from one prior of covariance S differ
    by a normal error of covariance A + B - A P B - B P A, P = S^-1, if both data sets
    saw the same departures and are independent: it vanishes where neither set says
    anything.
    """
    prior = 0.5 * (old.spread + new.spread)
    scale = np.sqrt(np.diag(prior))
    inverse = np.linalg.inv(prior / np.outer(scale, scale) + 1e-9 * np.eye(scale.size))
    size = scale.size
    total = np.zeros(size)
    chi_square = np.empty(change.shape[0])
    freedom = np.empty(change.shape[0], np.int64)
    stored = old.departure_covariance[both], new.departure_covariance[both]
    for first in range(0, change.shape[0], CHUNK):
        part = slice(first, first + CHUNK)
        a, b = (c[part].astype(np.float64) / np.outer(scale, scale) for c in stored)
        cross = a @ inverse @ b
        wanted = a + b - cross - cross.transpose(0, 2, 1)
        total += np.diagonal(wanted, axis1=1, axis2=2).sum(axis=0)
        value, vector = np.linalg.eigh(0.5 * (wanted + wanted.transpose(0, 2, 1)))
        along = np.einsum("pi,pij->pj", change[part] / scale, vector)
        known = value > LEAST_SHARE
        chi_square[part] = np.where(
            known, along**2 / np.where(known, value, 1.0), 0.0
        ).sum(axis=1)
        freedom[part] = known.sum(axis=1)
    spread = scale * np.sqrt(np.maximum(total / change.shape[0], 1e-12))
    return spread, chi_square, freedom


def _unknowns(old: Calibration, new: Calibration) -> tuple[UnknownChange, ...]:
    return tuple(
        UnknownChange(
            name=name,
            old=old.unknowns[name],
            old_error=old.unknown_errors.get(name, float("nan")),
            new=value,
            new_error=new.unknown_errors.get(name, float("nan")),
        )
        for name, value in new.unknowns.items()
        if name in old.unknowns
    )


def by_reason(reasons: NDArray[np.uint16]) -> dict[str, int]:
    """Number of pixels for each reason that occurs."""
    return {
        str(reason.name): int(np.count_nonzero(reasons & reason))
        for reason in PixelReason
        if reason and np.any(reasons & reason)
    }


def _residual(calibration: Calibration) -> float:
    return float(100.0 * np.sqrt(np.mean(calibration.steps.residual**2)))


def _pattern(calibration: Calibration) -> NDArray[np.float64] | None:
    return None if calibration.promise is None else calibration.promise.fixed_pattern


def _named(calibration: Calibration) -> str:
    return f"{calibration.scan_source}, {calibration.created}"


def _notes(old: Calibration, new: Calibration) -> tuple[str, ...]:
    """What limits the comparison, in sentences."""
    notes = []
    if old is new or (old.digest and old.digest == new.digest):
        notes.append(
            "Both are one and the same calibration, so that nothing can have changed; "
            "name two different ones."
        )
    if any(f"calibration of {old.created}" in finding for finding in new.findings):
        notes.append(
            "The new calibration is the old one refreshed: they share data, so that "
            "the expected spread is an upper bound."
        )
    if not np.allclose(old.largest, new.largest, rtol=0.05):
        notes.append("The thickest steps of the two wedge scans differ.")
    if old.version != new.version:
        notes.append(
            f"They were made by different versions, {old.version} and {new.version}."
        )
    return tuple(notes)
