"""One exposure of a wedge scan as the average pixel saw it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.scans.exposure_levels import exposure_levels
from spectral.scans.exposure_problems import ProblemKind, exposure_problems

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

IMAGE_PROBLEMS = (
    ProblemKind.SATURATED,
    ProblemKind.NOT_COUNTS,
    ProblemKind.ORDER,
    ProblemKind.REPEATED,
    ProblemKind.ROLE,
)
"""What the counts show by themselves, whatever stood in the beam."""
SILENT_SHARE = 0.01
"""So many good pixels without any count make an image incomplete."""
LEAST_EXPECTED = 25.0
"""Counts of an average pixel from which on a zero cannot be chance."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SeenExposure:
    """One exposure as the average pixel saw it.

    Attributes
    ----------
    exposure : int
    areal_density : array, shape (material,), in g/cm2
        What the scan says.
    current_ma, count_time_s : float
        The same.
    total : array, shape (bin,)
        Logarithm of mean counts over those of the average pixel without the smooth
        correction, at the output that the scan says.
    error : array, shape (bin,)
        Statistical standard deviation of that.
    remark : str
        What the stored image shows by itself; "" for nothing.
    """

    exposure: int
    areal_density: NDArray[np.float64]
    current_ma: float
    count_time_s: float
    total: NDArray[np.float64]
    error: NDArray[np.float64]
    remark: str = ""


def seen_in_fit(calibration: Calibration) -> list[SeenExposure]:
    """The exposures that taught a calibration."""
    steps = calibration.steps
    total = np.log1p(steps.physics_residual) + steps.drift[:, None]
    return [
        SeenExposure(
            exposure=int(steps.exposure[e]),
            areal_density=steps.areal_density[e],
            current_ma=float(steps.current_ma[e]),
            count_time_s=float(steps.count_time_s[e]),
            total=total[e],
            error=steps.error[e],
        )
        for e in range(total.shape[0])
    ]


def look_at(
    calibration: Calibration, scan: Scan, exposures: Sequence[int]
) -> list[SeenExposure]:
    """Exposures of a scan as the average pixel saw them, through all good pixels.

    Notes
    -----
    Pixels that count nothing where an average pixel counts plenty are left out of the
    mean, and the exposure's remark tells of them.
    """
    if len(exposures) == 0:
        return []
    flat = np.flatnonzero(calibration.good.ravel())
    problems = exposure_problems(scan, exposure_levels(scan, calibration.good))
    remarks = {p.exposure: p.text for p in problems if p.kind in IMAGE_PROBLEMS}
    return [
        _seen(calibration, scan, int(e), flat, remarks.get(int(e), ""))
        for e in exposures
    ]


def _seen(
    calibration: Calibration,
    scan: Scan,
    exposure: int,
    flat: NDArray[np.int64],
    remark: str,
) -> SeenExposure:
    """One exposure, less its silent pixels."""
    counts = scan.counts.read([exposure])[0].reshape(scan.shape[1], -1)[:, flat]
    silent = ~counts.any(axis=0)
    share = float(silent.mean())
    plenty = share < 1.0 and float(counts[0, ~silent].mean()) > LEAST_EXPECTED
    if plenty and share > SILENT_SHARE:
        remark = remark or f"{share:.0%} of the pixels count nothing"
        counts, flat = counts[:, ~silent], flat[~silent]
    current = (
        calibration.residual.reference_current_ma
        if scan.current_ma is None
        else float(scan.current_ma[exposure])
    )
    areal = np.nan_to_num(scan.areal_density[exposure])
    at = np.array([current])
    rate = calibration.expected_bins(areal[None], at, np.ones(1), flat).sum(axis=(0, 1))
    seconds = float(scan.count_time_s[exposure])
    expected = np.maximum(rate * seconds, 1e-9)
    measured = counts_to_bins(counts.astype(np.float64), axis=0).sum(axis=1)
    measured = np.maximum(measured, 0.5)
    smooth = calibration.residual.log_factor(areal[None], current)[0]
    return SeenExposure(
        exposure=exposure,
        areal_density=areal,
        current_ma=current,
        count_time_s=seconds,
        total=np.log(measured / expected) + smooth,
        error=1.0 / np.sqrt(measured),
        remark=remark,
    )
