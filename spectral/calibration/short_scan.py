"""The open and wedge exposures of a scan too short to calibrate by itself."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.matching import scan_differs
from spectral.calibration.wedge_data import WedgeData
from spectral.errors import ScanError
from spectral.scans.bad_pixels import commonest_reason, find_bad_pixels

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan


def short_scan_data(
    calibration: Calibration,
    scan: Scan,
    usable: NDArray[np.bool_],
    *,
    roles: tuple[str, ...] = ("open", "wedge"),
) -> WedgeData:
    """Exposures of known content, for the pixels that may be used.

    Parameters
    ----------
    calibration : Calibration
    scan : Scan
        Where it gives no tube current, the calibration's most used one is taken.
    usable : array of bool, shape (row, column)
    roles : tuple of str
        Roles of the exposures to take.

    Raises
    ------
    ScanError
        If the scan is of another setting, holds no open exposure or no usable
        pixel, or does not say how thick a step is.
    """
    differs = scan_differs(calibration, scan)
    if differs:
        msg = (
            f"{scan.source} does not go with the calibration: it {differs}; scan at the "
            "calibration's setting"
        )
        raise ScanError(msg)
    if scan.exposures("open").size == 0:
        msg = f"{scan.source}: no open exposure; add at least one without a step"
        raise ScanError(msg)
    good = np.flatnonzero(usable.ravel())
    if good.size == 0:
        msg = f"{scan.source}: no pixel is sound in both scan and calibration"
        reason = commonest_reason(find_bad_pixels(scan))
        raise ScanError(f"{msg}; of most in the scan, {reason}" if reason else msg)
    chosen = scan.exposures(*roles)
    areal = scan.areal_density[chosen]
    is_open = np.array([scan.role[int(i)] == "open" for i in chosen])
    areal[is_open] = 0.0
    if not np.isfinite(areal).all():
        unknown = int(chosen[~np.isfinite(areal).all(axis=1)][0])
        msg = f"{scan.source}: exposure {unknown} is a wedge step of no known thickness"
        raise ScanError(msg)
    counts = scan.counts.read(chosen)
    above = counts.reshape(*counts.shape[:2], -1)[:, :, good].transpose(2, 0, 1)
    current = np.full(chosen.size, calibration.residual.reference_current_ma)
    if scan.current_ma is not None:
        current = scan.current_ma[chosen]
    return WedgeData(
        exposure=chosen,
        areal_density=areal,
        current_ma=current,
        count_time_s=scan.count_time_s[chosen],
        above=above.astype(np.float64),
        pixel=good,
        shape=calibration.shape,
        thresholds_kev=scan.thresholds_kev,
    )
