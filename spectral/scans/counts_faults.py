"""Counts that cannot be: found per pixel and exposure, never repaired."""

from __future__ import annotations

import enum
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.stored_counts import NOT_A_COUNT

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

_RISE_DEVIATIONS = 5.0


class CountFault(enum.IntFlag):
    """What is wrong with the counts of one pixel in one exposure; bits add up."""

    NONE = 0
    NOT_A_COUNT = 1
    AT_LIMIT = 2
    RISING = 4


FAULT_MEANING: dict[CountFault, str] = {
    CountFault.NOT_A_COUNT: "a stored number is negative, NaN or a fraction",
    CountFault.AT_LIMIT: "a count stands at the largest value it can have",
    CountFault.RISING: "a higher threshold counted more than a lower one, beyond noise",
}


def count_faults(
    counts: NDArray[np.integer], *, count_limit: int = NOT_A_COUNT
) -> NDArray[np.uint8]:
    """Faults of counts above rising thresholds.

    Parameters
    ----------
    counts : array of integers, shape (exposure, threshold, row, column)
        Rising thresholds along the second axis. Any further or fewer pixel axes do.
    count_limit : int
        Value at which counting stops (`Scan.count_limit`).

    Returns
    -------
    array of uint8, shape (exposure, row, column)
        Bits of `CountFault`.

    Notes
    -----
    Every pulse above a threshold is also above the ones below it, so N(k+1) may
    exceed N(k) only by noise of the comparators. With equal means the difference of
    two Poisson numbers has the variance N(k) + N(k+1); a rise of more than five of
    its standard deviations is a fault. In real counts of one pulse train the noise
    is smaller, so this errs towards leaving a pixel alone.
    Source: J. Przyborowski, H. Wilenski 1940, Biometrika 31, 313 (comparison of two
    Poisson numbers; from memory).

    Examples
    --------
    >>> stack = np.array([[[9, 65535, 10]], [[8, 65535, 90]]]).reshape(1, 2, 3)
    >>> count_faults(stack, count_limit=65535).tolist()
    [[0, 2, 4]]
    """
    no_count = counts == NOT_A_COUNT
    at_limit = (counts >= count_limit) & ~no_count
    faults = np.where(no_count.any(1), int(CountFault.NOT_A_COUNT), 0)
    faults |= np.where(at_limit.any(1), int(CountFault.AT_LIMIT), 0)
    usable = ~(no_count | at_limit)
    rises = (counts[:, 1:] > counts[:, :-1]) & usable[:, :-1] & usable[:, 1:]
    lower = counts[:, :-1][rises].astype(np.float64)
    upper = counts[:, 1:][rises].astype(np.float64)
    rises[rises] = upper - lower > _RISE_DEVIATIONS * np.sqrt(upper + lower)
    faults |= np.where(rises.any(1), int(CountFault.RISING), 0)
    return faults.astype(np.uint8)


def scan_count_faults(
    scan: Scan, exposures: Sequence[int] | NDArray[np.int64] | None = None
) -> NDArray[np.uint8]:
    """Faults of a scan, one exposure in memory at a time.

    Parameters
    ----------
    scan : Scan
    exposures : sequence of int, optional
        Which exposures; all by default.

    Returns
    -------
    array of uint8, shape (exposure, row, column)
        Bits of `CountFault`.
    """
    n, _, y, x = scan.shape
    which = range(n) if exposures is None else exposures
    out = np.empty((len(which), y, x), np.uint8)
    for i, exposure in enumerate(which):
        counts = scan.counts.read([int(exposure)])
        out[i] = count_faults(counts, count_limit=scan.count_limit)[0]
    return out
