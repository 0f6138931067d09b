"""The tube's output in an object scan, from that scan's own open exposures."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.pooled_counts import pooled_at
from spectral.forward.counting_model import counts_to_bins

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

LEAST_RISE = 0.3
"""Of counts with the output, as a power, that a step reckons with."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Session:
    """Output of the tube during a scan, relative to the calibration's.

    Attributes
    ----------
    output : array, shape (exposure,)
        For every exposure of the scan; 1 if it has no open exposure.
    opens : array of int64, shape (open,)
        Exposures that were used.
    open_output : array, shape (open,)
        What each of them gave.
    by_bin : array, shape (bin,)
        Mean counts over expected counts of all opens, after the output: departs from
        1 where thresholds or spectrum moved since the wedge scan.
    notes : tuple of str
    """

    output: NDArray[np.float64]
    opens: NDArray[np.int64]
    open_output: NDArray[np.float64]
    by_bin: NDArray[np.float64]
    notes: tuple[str, ...]


def current_of(scan: Scan, calibration: Calibration) -> NDArray[np.float64]:
    """Tube current of each exposure; the calibration's where the scan gives none."""
    if scan.current_ma is None:
        return np.full(scan.shape[0], calibration.residual.reference_current_ma)
    return scan.current_ma


def normalise(
    calibration: Calibration, scan: Scan, usable: NDArray[np.bool_]
) -> Session:
    """Tube output of each exposure from the scan's open exposures.

    Parameters
    ----------
    calibration : Calibration
    scan : Scan
    usable : array of bool, shape (row, column)
        Pixels to use.

    Returns
    -------
    Session

    Notes
    -----
    Opens on both sides of the object exposures give a straight line in exposure
    index; opens on one side give their mean.
    """
    exposures = scan.shape[0]
    bins = calibration.thresholds_kev.size
    opens = scan.exposures("open")
    notes: list[str] = []
    if opens.size == 0:
        notes.append(
            "no open exposure in this scan: the tube's output is taken as it was "
            "during the wedge scan"
        )
        return Session(
            output=np.ones(exposures),
            opens=opens,
            open_output=np.empty(0),
            by_bin=np.ones(bins),
            notes=tuple(notes),
        )
    flat = np.flatnonzero(usable.ravel())
    current = current_of(scan, calibration)
    found = np.ones(opens.size)
    output = 1.0
    seen = np.zeros(bins)
    wanted = np.zeros(bins)
    for i, e in enumerate(opens):
        counts = scan.counts.read([int(e)])[0].reshape(bins, -1)[:, flat]
        measured = counts_to_bins(counts.astype(np.float64), axis=0).sum(axis=1)
        output, expected = _met_by(
            calibration,
            measured.sum(),
            float(current[e]),
            flat,
            scan.count_time_s[e],
            start=output,
        )
        found[i] = output
        seen += measured
        wanted += expected
    return Session(
        output=_along(opens, found, scan.exposures("object", "wedge"), exposures),
        opens=opens,
        open_output=found,
        by_bin=seen / wanted,
        notes=tuple(notes),
    )


def _met_by(
    calibration: Calibration,
    counts: float,
    current_ma: float,
    flat: NDArray[np.int64],
    count_time_s: float,
    *,
    start: float,
) -> tuple[float, NDArray[np.float64]]:
    """Output at which the pixels' open counts are met, and their sum by bin."""
    nothing = np.zeros((1, calibration.largest.size))
    current, time_s = np.array([current_ma]), np.array([count_time_s])
    output = start
    expected = np.ones(1)
    for _ in range(6):
        found, slope = pooled_at(
            calibration, nothing, current, time_s, np.array([output]), flat
        )
        expected = found[0]
        total = expected.sum()
        if abs(counts / total - 1.0) < 1e-7:
            break
        # pile-up flattens the rise, and beyond its top no step would lead back
        rise = max(slope[0, :, 0].sum(), LEAST_RISE * total)
        output *= float(np.exp((counts - total) / rise))
    return output, expected


def _along(
    opens: NDArray[np.int64],
    found: NDArray[np.float64],
    others: NDArray[np.int64],
    exposures: int,
) -> NDArray[np.float64]:
    """Output at every exposure."""
    bracketed = (
        others.size > 0 and opens.min() < others.min() and (opens.max() > others.max())
    )
    if not bracketed:
        return np.full(exposures, found.mean())
    slope, level = np.polynomial.polynomial.polyfit(opens, found, 1)[::-1]
    return np.asarray(level + slope * np.arange(exposures))
