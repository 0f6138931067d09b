"""Open exposures of a long scan added up into a few, so that they fit into memory."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.scans.scan import CountSource, Scan

MOST_BYTES = 2**26
"""Of the opens' counts as float64; what is done with them takes several times that."""
FEWEST = 4
"""Opens that are told apart whatever their size."""


@dataclass(frozen=True, slots=True, eq=False)
class SummedCounts:
    """Counts of groups of exposures, added up when asked for.

    Attributes
    ----------
    single : CountSource
    groups : tuple of arrays of int64
        Exposures that are added up for each of the new ones.
    """

    single: CountSource
    groups: tuple[NDArray[np.int64], ...]

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(group, threshold, row, column)."""
        return len(self.groups), *self.single.shape[1:]

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Sums of the named groups; what exceeds 32 bits stays at the largest value."""
        out = np.empty((len(exposures), *self.shape[1:]), np.uint32)
        for i, group in enumerate(exposures):
            total = np.zeros(self.shape[1:], np.uint64)
            for exposure in self.groups[int(group)]:
                total += self.single.read([int(exposure)])[0]
            out[i] = np.minimum(total, np.iinfo(np.uint32).max)
        return out


def pooled_opens(scan: Scan, *, most_bytes: int = MOST_BYTES) -> Scan:
    """The scan itself or, if its opens are many, a scan of sums of them alone.

    Neighbours of one current and count time are added up; sums of Poisson counts are
    Poisson counts of the longer time, so nothing is lost but a drift among them.

    Parameters
    ----------
    scan : Scan
    most_bytes : int
        What the counts of the opens may take as float64.
    """
    opens = scan.exposures("open")
    most = max(FEWEST, most_bytes // (8 * int(np.prod(scan.shape[1:]))))
    if opens.size <= most:
        return scan
    current = scan.current_ma
    setting = [
        (float(scan.count_time_s[e]), None if current is None else float(current[e]))
        for e in opens
    ]
    runs = [opens[[s == kind for s in setting]] for kind in dict.fromkeys(setting)]
    groups = tuple(
        group
        for run in runs
        for group in np.array_split(run, max(1, round(most * run.size / opens.size)))
    )
    first = np.array([group[0] for group in groups])
    angle = scan.rotation_angle_deg
    return replace(
        scan,
        counts=SummedCounts(scan.counts, groups),
        role=("open",) * len(groups),
        thickness_mm=scan.thickness_mm[first],
        count_time_s=np.array([scan.count_time_s[group].sum() for group in groups]),
        current_ma=None if current is None else current[first],
        rotation_angle_deg=None if angle is None else angle[first],
        count_limit=np.iinfo(np.uint32).max,
    )
