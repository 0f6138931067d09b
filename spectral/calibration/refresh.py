"""An older calibration brought up to date by a short scan."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import UTC, datetime
from typing import TYPE_CHECKING

import numpy as np

import spectral
from spectral.calibration.common_drift import CommonDrift, common_drift, moved
from spectral.calibration.drift_spread import class_of
from spectral.calibration.full_scan import full_scan_reasons, refresh_notes
from spectral.calibration.pixel_drift import PixelDrift, pixel_drift
from spectral.calibration.promise import with_promise
from spectral.calibration.scan_sentences import told_of
from spectral.calibration.short_scan import short_scan_data
from spectral.scans.bad_pixels import PixelReason, find_bad_pixels
from spectral.scans.pooled_opens import MOST_BYTES, pooled_opens

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.calibration.wedge_data import WedgeData
    from spectral.scans.scan import Scan

MISFIT_SIGMAS = 6.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Refreshed:
    """A refreshed calibration, what moved, and whether that is enough.

    Attributes
    ----------
    calibration : Calibration
        Its findings name the calibration and the scan that it came from.
    common : CommonDrift
        What all pixels did together.
    pixels : PixelDrift
        What each did by itself, for the pixels in ``pixel``.
    pixel : array of int64, shape (pixel,)
        Flat indices.
    new_reasons : array of uint16, shape (row, column)
        Bits of `PixelReason` that the short scan added to pixels that were sound.
    full_scan_needed : bool
    reasons : tuple of str
        Why a full scan is needed, in sentences; empty if it is not.
    notes : tuple of str
        What else deserves a look.
    """

    calibration: Calibration
    common: CommonDrift
    pixels: PixelDrift
    pixel: NDArray[np.int64]
    new_reasons: NDArray[np.uint16]
    full_scan_needed: bool
    reasons: tuple[str, ...]
    notes: tuple[str, ...]


def refresh(calibration: Calibration, scan: Scan) -> Refreshed:
    """Follow the drift since a calibration, by a scan of opens and a few steps.

    Parameters
    ----------
    calibration : Calibration
    scan : Scan
        Of the same setting: open exposures and, better, two or three wedge steps.

    Returns
    -------
    Refreshed

    Raises
    ------
    ScanError
        If scan and calibration are not of one setting, the scan holds no open
        exposure, or no small movement of the thresholds meets its counts.

    Notes
    -----
    First the tube's output and one shift for each threshold are found from the counts
    of all pixels together; then every pixel's departures, with the calibration as the
    prior, widened by a drift that the scan itself teaches. Pixels that the calibration
    calls bad stay bad: their responses were never learned.
    """
    found = find_bad_pixels(scan) if scan.shape[2:] == calibration.shape else 0
    usable = calibration.good & (found == 0)
    data = short_scan_data(calibration, scan, usable)
    with told_of(scan):
        common = common_drift(calibration, data)
    after = moved(calibration, common)
    pixels = pixel_drift(after, data, common.output)
    sick = _misfits(pixels.deviance, data)
    new = np.where(calibration.good, found, 0).astype(np.uint16)
    new.reshape(-1)[data.pixel[sick]] |= np.uint16(PixelReason.MISFIT)
    reasons = full_scan_reasons(calibration, data, common, pixels, new)
    made = _assemble(calibration, after, data, common, pixels, new)
    made = replace(
        made,
        findings=(
            *calibration.findings,
            _history(calibration, scan, common),
            *reasons,
        ),
        created=datetime.now(UTC).isoformat(timespec="seconds"),
        version=spectral.__version__,
        digest="",
    )
    if calibration.promise is not None:
        made = with_promise(made)
    return Refreshed(
        calibration=made,
        common=common,
        pixels=pixels,
        pixel=data.pixel,
        new_reasons=new,
        full_scan_needed=bool(reasons),
        reasons=reasons,
        notes=refresh_notes(data),
    )


def updated_by_opens(
    calibration: Calibration, scan: Scan, *, bad: NDArray[np.uint16] | None = None
) -> Calibration:
    """The calibration with each pixel's departures told better by a scan's opens.

    Nothing that all pixels share is changed: an object scan's own open exposures make
    its maps' fixed pattern smaller, and follow single pixels that drifted.

    Parameters
    ----------
    calibration : Calibration
    scan : Scan
        Of an object, with open exposures; without any the calibration comes back.
    bad : array of uint16, shape (row, column), optional
        Its pixels' reasons, if they have been looked for (`find_bad_pixels`).

    Raises
    ------
    ScanError
        If scan and calibration are not of one setting.
    """
    if scan.exposures("open").size == 0:
        return calibration
    found: int | NDArray[np.uint16] = 0
    if scan.shape[2:] == calibration.shape:
        found = find_bad_pixels(scan, most_bytes=2 * MOST_BYTES) if bad is None else bad
    data = short_scan_data(
        calibration,
        _without_layers(pooled_opens(scan), calibration),
        calibration.good & (found == 0),
        roles=("open",),
    )
    with told_of(scan):
        output = common_drift(calibration, data, shift_prior_kev=1e-6).output
    return _with_departures(calibration, data, pixel_drift(calibration, data, output))


def _without_layers(scan: Scan, calibration: Calibration) -> Scan:
    """The scan told as of the calibration's materials: its opens hold none of any."""
    nothing = np.zeros((scan.shape[0], len(calibration.materials)))
    return replace(scan, materials=calibration.materials, thickness_mm=nothing)


def _misfits(deviance: NDArray[np.float64], data: WedgeData) -> NDArray[np.bool_]:
    """Pixels whose counts even their drifted response does not meet."""
    middle = float(np.median(deviance))
    wide = 1.4826 * float(np.median(np.abs(deviance - middle)))
    wide = max(wide, float(np.sqrt(2.0 / data.above[0].size)))
    return np.asarray(deviance > middle + MISFIT_SIGMAS * wide)


def _with_departures(
    calibration: Calibration, data: WedgeData, pixels: PixelDrift
) -> Calibration:
    """The calibration with the departures of the data's pixels replaced."""
    departures = calibration.departures.copy()
    covariance = calibration.departure_covariance.copy()
    size = departures.shape[-1]
    departures.reshape(-1, size)[data.pixel] = pixels.values
    covariance.reshape(-1, size, size)[data.pixel] = pixels.covariance
    return replace(calibration, departures=departures, departure_covariance=covariance)


def _assemble(
    before: Calibration,
    after: Calibration,
    data: WedgeData,
    common: CommonDrift,
    pixels: PixelDrift,
    new: NDArray[np.uint16],
) -> Calibration:
    """The moved calibration with new departures, reasons and unknowns."""
    made = _with_departures(after, data, pixels)
    departures, deviance = made.departures, made.deviance.copy()
    departures[new != 0] = 0.0
    deviance[new != 0] = np.nan
    opens = common.output[data.is_open]
    ln_output = float(np.log(opens).mean())
    which = class_of(departures.shape[-1])
    change = {
        "ln_flux": (ln_output, float((common.output_error / common.output).mean())),
        "ln_noise": (
            float(np.log(after.model.noise_kev / before.model.noise_kev)),
            0.5 * common.variance_error_kev2 / after.model.noise_kev**2,
        ),
        "ln_dead_time": (common.ln_dead_time, common.ln_dead_time_error),
        "ln_tail": (common.ln_dead_time, common.ln_dead_time_error),
        **{
            f"shift_{k + 1}_kev": (float(shift), float(error))
            for k, (shift, error) in enumerate(
                zip(common.shift_kev, common.shift_error_kev, strict=True)
            )
        },
    }
    return replace(
        made,
        photons_per_mas=made.photons_per_mas * float(np.exp(ln_output)),
        spread=made.spread + np.diag(pixels.spread[which] ** 2),
        pixel_reasons=made.pixel_reasons | new,
        deviance=deviance,
        unknowns={
            name: value + change.get(name, (0.0, 0.0))[0]
            for name, value in made.unknowns.items()
        },
        unknown_errors={
            name: float(np.hypot(error, change.get(name, (0.0, 0.0))[1]))
            for name, error in made.unknown_errors.items()
        },
    )


def _history(calibration: Calibration, scan: Scan, common: CommonDrift) -> str:
    """Where a refreshed calibration came from, in one sentence."""
    shifts = ", ".join(f"{s:+.3f}" for s in common.shift_kev)
    of = calibration.digest or "never stored"
    by = scan.digest or "never stored"
    return (
        f"Refreshed from the calibration of {calibration.created} (SHA-256 {of}) by "
        f"{scan.source} (SHA-256 {by}): thresholds moved by {shifts} keV."
    )
