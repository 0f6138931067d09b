"""Threshold scans checked and laid out pixel by pixel, the energy rising."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.threshold_scan.landmarks import Landmark, landmark_of
from spectral.errors import CalibrationError, InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.scans.threshold_scan import ThresholdScan


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OrientedScan:
    """A scan's settings and counts, in an order in which the energy rises.

    Attributes
    ----------
    scan : ThresholdScan
    landmark : Landmark
    settings : array, shape (setting,)
    counts : array, shape (pixel, setting)
        Pixels of all comparators, brought to the scan's mean count time.
    """

    scan: ThresholdScan
    landmark: Landmark
    settings: NDArray[np.float64]
    counts: NDArray[np.float64]


def check_scans(scans: Sequence[ThresholdScan]) -> None:
    """Refuse scans that cannot be of one detector."""
    if not scans:
        msg = "no threshold scan was given"
        raise InputError(msg)
    first = scans[0]
    for other in scans[1:]:
        for name in ("sensor_material", "sensor_thickness_mm", "pixel_size_um"):
            if getattr(other, name) != getattr(first, name):
                msg = f"{other.file}: {name} differs from that of {first.file}"
                raise InputError(msg)
        if other.shape[1:] != first.shape[1:]:
            msg = (
                f"{other.file}: comparators and pixels {other.shape[1:]} differ from "
                f"{first.shape[1:]} of {first.file}"
            )
            raise InputError(msg)


def orient(scan: ThresholdScan) -> OrientedScan:
    """Order the settings so that counts fall along them."""
    n = scan.shape[0]
    counts = np.moveaxis(scan.counts, 0, -1).reshape(-1, n).astype(np.float64)
    counts = counts * (scan.count_time_s.mean() / scan.count_time_s)
    settings = scan.settings
    quarter = max(1, n // 4)
    if counts[:, :quarter].sum() < counts[:, -quarter:].sum():
        settings, counts = settings[::-1], counts[:, ::-1]
    return OrientedScan(
        scan=scan,
        landmark=landmark_of(scan.source),
        settings=np.ascontiguousarray(settings),
        counts=np.ascontiguousarray(counts),
    )


def good_pixels(oriented: list[OrientedScan]) -> NDArray[np.bool_]:
    """Pixels that no mask excludes and that count in every scan."""
    good = np.ones(len(oriented[0].counts), bool)
    for each in oriented:
        mask = np.broadcast_to(each.scan.pixel_mask != 0, each.scan.shape[1:])
        good &= ~mask.ravel() & (each.counts.max(axis=1) > 0.0)
    if not good.any():
        msg = f"{oriented[0].scan.file}: no pixel counts in every scan"
        raise CalibrationError(msg)
    return good
