"""A wedge scan reduced to what a calibration reads."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import CalibrationError
from spectral.forward.counting_model import counts_to_bins

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

LEAST_APART = 1e-3
"""Smallest over largest singular value of the steps, each material's largest being 1."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WedgeData:
    """Open and wedge exposures of the good pixels.

    Attributes
    ----------
    exposure : array of int64, shape (exposure,)
        Index of each in the scan.
    areal_density : array, shape (exposure, material), in g/cm2
    charge_mas : array, shape (exposure,)
        Current times count time; current 1 where the scan gives none.
    current_ma, count_time_s : arrays, shape (exposure,)
    above : array of float64, shape (pixel, exposure, threshold)
        Counts above each threshold.
    pixel : array of int64, shape (pixel,)
        Flat index of each good pixel.
    shape : (row, column)
    thresholds_kev : array, shape (threshold,)
    """

    exposure: NDArray[np.int64]
    areal_density: NDArray[np.float64]
    current_ma: NDArray[np.float64]
    count_time_s: NDArray[np.float64]
    above: NDArray[np.float64]
    pixel: NDArray[np.int64]
    shape: tuple[int, int]
    thresholds_kev: NDArray[np.float64]

    @property
    def is_open(self) -> NDArray[np.bool_]:
        """True where nothing stood in the beam, shape (exposure,)."""
        return np.asarray((self.areal_density == 0.0).all(axis=1))

    @property
    def bins(self) -> NDArray[np.float64]:
        """Counts between thresholds, shape (pixel, exposure, bin)."""
        return counts_to_bins(self.above)

    def without(self, exposures: NDArray[np.int64]) -> WedgeData:
        """The same data without some of the scan's exposures."""
        keep = ~np.isin(self.exposure, exposures)
        return WedgeData(
            exposure=self.exposure[keep],
            areal_density=self.areal_density[keep],
            current_ma=self.current_ma[keep],
            count_time_s=self.count_time_s[keep],
            above=self.above[:, keep],
            pixel=self.pixel,
            shape=self.shape,
            thresholds_kev=self.thresholds_kev,
        )


def wedge_data(
    scan: Scan,
    bad: NDArray[np.bool_],
    *,
    excluded: tuple[int, ...] = (),
) -> WedgeData:
    """Open and wedge exposures of a scan, for its good pixels.

    Parameters
    ----------
    scan : Scan
    bad : array of bool, shape (row, column)
        Pixels to leave out.
    excluded : tuple of int
        Exposures to leave out.

    Raises
    ------
    CalibrationError
        If there is no open exposure, too few steps, a material that never stands
        in the beam or never changes alone, or no good pixel.
    """
    chosen = np.array(
        [i for i in scan.exposures("open", "wedge") if i not in excluded], np.int64
    )
    areal = scan.areal_density[chosen]
    areal = np.where(np.isfinite(areal), areal, 0.0)
    material_count = areal.shape[1]
    steps = np.unique(areal, axis=0)
    if not (areal == 0.0).all(axis=1).any():
        msg = f"{scan.source}: no open exposure; add at least one without a step"
        raise CalibrationError(msg)
    needed = 1 + material_count + material_count * (material_count + 1) // 2
    if len(steps) < needed:
        msg = (
            f"{scan.source}: {len(steps)} different stacks, at least {needed} are "
            f"needed for {material_count} materials (open included); add wedge steps"
        )
        raise CalibrationError(msg)
    for layer, values in zip(scan.materials, areal.T, strict=True):
        if not np.any(values > 0.0):
            msg = f"{scan.source}: no wedge step holds {layer.name}; add some"
            raise CalibrationError(msg)
    scaled = areal / areal.max(axis=0)
    apart = np.linalg.svd(scaled, compute_uv=False)
    if apart[-1] < LEAST_APART * apart[0]:
        names = " and ".join(layer.name for layer in scan.materials)
        msg = (
            f"{scan.source}: the steps hold {names} in one fixed proportion, so they "
            "cannot be told apart; add steps that change one material alone"
        )
        raise CalibrationError(msg)
    good = np.flatnonzero(~bad.ravel())
    if good.size == 0:
        msg = f"{scan.source}: no good pixel is left to calibrate"
        raise CalibrationError(msg)
    counts = scan.counts.read(chosen)
    n, k = counts.shape[:2]
    above = counts.reshape(n, k, -1)[:, :, good].transpose(2, 0, 1).astype(np.float64)
    current = (
        np.ones(chosen.size) if scan.current_ma is None else scan.current_ma[chosen]
    )
    return WedgeData(
        exposure=chosen,
        areal_density=areal,
        current_ma=current,
        count_time_s=scan.count_time_s[chosen],
        above=above,
        pixel=good,
        shape=(counts.shape[2], counts.shape[3]),
        thresholds_kev=scan.thresholds_kev,
    )
