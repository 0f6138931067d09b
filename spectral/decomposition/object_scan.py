"""What of a scan can be decomposed with a calibration."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.matching import beam_differs
from spectral.errors import InputError, ScanError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

THRESHOLD_TOLERANCE_KEV = 0.01


def chosen_exposures(scan: Scan, exposures: Sequence[int] | None) -> NDArray[np.int64]:
    """Exposures to decompose.

    Raises
    ------
    ScanError
        If none is named and the scan holds no object.
    InputError
        If one is named that the scan does not hold, a dark one, or one twice.
    """
    if exposures is None:
        chosen = scan.exposures("object")
        if chosen.size == 0:
            msg = (
                f"{scan.source}: no exposure has the role 'object'; name the exposures "
                "to decompose"
            )
            raise ScanError(msg)
        return chosen
    chosen = np.array(exposures, np.int64)
    distinct, times = np.unique(chosen, return_counts=True)
    if np.any(times > 1):
        msg = f"{scan.source}: exposure {distinct[times > 1][0]} is asked for twice"
        raise InputError(msg)
    wrong = (chosen < 0) | (chosen >= scan.shape[0])
    if wrong.any() or chosen.size == 0:
        named = ", ".join(map(str, chosen[wrong])) or "none"
        msg = f"{scan.source}: exposures 0 to {scan.shape[0] - 1} exist, asked for {named}"
        raise InputError(msg)
    dark = np.intersect1d(chosen, scan.exposures("dark"))
    if dark.size:
        msg = f"{scan.source}: exposure {dark[0]} is dark: it shows no object"
        raise InputError(msg)
    return chosen


def check_match(calibration: Calibration, scan: Scan) -> None:
    """Refuse a scan that another detector setting made.

    Raises
    ------
    ScanError
        Saying what differs.
    """
    _, thresholds, y, x = scan.shape
    wanted = calibration.thresholds_kev
    differs = ""
    if (y, x) != calibration.shape:
        differs = f"has {y} x {x} pixels, the calibration {calibration.shape}"
    elif thresholds != wanted.size:
        differs = f"has {thresholds} thresholds, the calibration {wanted.size}"
    elif np.abs(scan.thresholds_kev - wanted).max() > THRESHOLD_TOLERANCE_KEV:
        differs = (
            f"has thresholds at {scan.thresholds_kev.tolist()} keV, the calibration at "
            f"{wanted.tolist()} keV"
        )
    elif abs(scan.voltage_kv - calibration.voltage_kv) > 0.1:
        differs = (
            f"was taken at {scan.voltage_kv:g} kV, the calibration at "
            f"{calibration.voltage_kv:g} kV"
        )
    elif scan.filters and calibration.filters:
        filters = tuple(f"{f.material} {f.thickness_mm:g} mm" for f in scan.filters)
        if sorted(filters) != sorted(calibration.filters):
            differs = (
                f"has the filters {', '.join(filters)}, the calibration "
                f"{', '.join(calibration.filters)}"
            )
    differs = differs or beam_differs(calibration, scan)
    if differs:
        msg = f"{scan.source} {differs}: use the calibration of this setting"
        raise ScanError(msg)
