"""What of a scan can be decomposed with a calibration."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.matching import scan_differs
from spectral.errors import InputError, ScanError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan


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
    differs = scan_differs(calibration, scan, layers=False)
    if differs:
        msg = (
            f"{scan.source} does not go with the calibration: it {differs}; use the "
            "calibration of its setting"
        )
        raise ScanError(msg)
