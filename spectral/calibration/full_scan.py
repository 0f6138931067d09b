"""When a short scan no longer suffices to bring a calibration up to date."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.bad_pixels import PixelReason

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.common_drift import CommonDrift
    from spectral.calibration.pixel_drift import PixelDrift
    from spectral.calibration.result import Calibration
    from spectral.calibration.wedge_data import WedgeData

# All limits are common practice, no source: a drift beyond them is no longer small
# beside what the calibration learned.
LARGEST_SHIFT_KEV = 0.5
LARGEST_PIXEL_SHIFT_KEV = 0.25
LARGEST_OUTPUT_CHANGE = 0.2
LARGEST_BAD_SHARE = 0.01
FALSE_ALARM = 1e-3
CLEAR = 2.0


def full_scan_reasons(
    calibration: Calibration,
    data: WedgeData,
    common: CommonDrift,
    pixels: PixelDrift,
    new_reasons: NDArray[np.uint16],
) -> tuple[str, ...]:
    """Why a full wedge scan is needed after a short one, in sentences.

    Parameters
    ----------
    calibration : Calibration
        Before the refresh.
    data : WedgeData
        Of the short scan.
    common : CommonDrift
    pixels : PixelDrift
    new_reasons : array of uint16, shape (row, column)
    """
    return tuple(
        sentence
        for sentence in (
            _shift(common),
            _pixel_shift(pixels),
            _residuals(data, common),
            _output(data, common),
            _domain(calibration, data),
            _bad(calibration, new_reasons),
        )
        if sentence
    )


def refresh_notes(data: WedgeData) -> tuple[str, ...]:
    """What a short scan could not tell, in sentences."""
    if not data.is_open.all():
        return ()
    note = (
        "The scan holds no wedge step: a shift that all thresholds share is told from "
        "the tube's output by what is usual only; add two or three steps."
    )
    return (note,)


def _shift(common: CommonDrift) -> str:
    """Thresholds that moved further than the smooth correction can be trusted."""
    surely = np.abs(common.shift_kev) - common.shift_error_kev
    k = int(surely.argmax())
    if surely[k] <= LARGEST_SHIFT_KEV:
        return ""
    return (
        f"Threshold {k + 1} moved by {common.shift_kev[k]:+.2f} keV, more than "
        f"{LARGEST_SHIFT_KEV:g} keV: the smooth correction was learned elsewhere."
    )


def _pixel_shift(pixels: PixelDrift) -> str:
    spread, error = pixels.spread[1], pixels.spread_error[1]
    if spread - CLEAR * error <= LARGEST_PIXEL_SHIFT_KEV:
        return ""
    return (
        f"Pixels' thresholds drifted apart by {spread:.2f} keV (standard deviation), "
        f"more than {LARGEST_PIXEL_SHIFT_KEV:g} keV: each needs more counts than a "
        "short scan gives."
    )


def _residuals(data: WedgeData, common: CommonDrift) -> str:
    if common.chance >= FALSE_ALARM:
        return ""
    size = common.residual / common.residual_error
    e, b = np.unravel_index(int(np.abs(size).argmax()), size.shape)
    return (
        "The moved calibration does not meet the short scan's mean counts: chi-square "
        f"{common.chi_square:.0f} for {common.freedom} degrees of freedom, worst in "
        f"exposure {data.exposure[e]}, bin {b + 1} "
        f"({100 * common.residual[e, b]:+.2f} %); beam, filters or sensor changed, or "
        "a step is not what its label says."
    )


def _output(data: WedgeData, common: CommonDrift) -> str:
    change = float(common.output[data.is_open].mean()) - 1.0
    if abs(change) <= LARGEST_OUTPUT_CHANGE:
        return ""
    return (
        f"The tube's output changed by {100 * change:+.0f} %: count rates are no "
        "longer those of the wedge scan."
    )


def _domain(calibration: Calibration, data: WedgeData) -> str:
    top = calibration.largest_current_ma
    if data.current_ma.max() > 1.001 * top:
        return (
            f"The scan was taken at up to {data.current_ma.max():g} mA, the wedge scan "
            f"at {top:g} mA at most: the calibration does not reach that rate."
        )
    over = data.areal_density.max(axis=0) > 1.001 * calibration.largest
    if over.any():
        name = calibration.materials[int(over.argmax())].name
        return (
            f"A step holds more {name} than any step of the wedge scan: the smooth "
            "correction does not reach it."
        )
    return ""


def _bad(calibration: Calibration, new_reasons: NDArray[np.uint16]) -> str:
    count = int(np.count_nonzero(new_reasons))
    if count <= max(3.0, LARGEST_BAD_SHARE * calibration.good.sum()):
        return ""
    kinds = [
        f"{int(np.count_nonzero(new_reasons & reason))} {str(reason.name).lower()}"
        for reason in PixelReason
        if reason and np.any(new_reasons & reason)
    ]
    return (
        f"{count} pixels that were sound are not any more ({', '.join(kinds)}): more "
        f"than {100 * LARGEST_BAD_SHARE:g} % of all."
    ).replace("_", " ")
