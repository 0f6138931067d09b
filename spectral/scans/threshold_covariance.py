"""Whether counts above neighbouring thresholds share pulses, as they must."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.repeats import settings_with_repeats

if TYPE_CHECKING:
    from collections.abc import Collection

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

_MOST_PAIRS = 8
"""Pairs of repeats that are read: enough for any detector, and soon read."""
_FEWEST_COUNTS = 5.0
_LEAST_SHARED = 0.15
_CERTAINLY_LESS = 0.5
_DEVIATIONS = 4.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SharedPulses:
    """How far counts follow those above the next threshold, from repeat to repeat.

    Attributes
    ----------
    exposures : tuple of int
        That were compared, two by two.
    share : float
        Covariance of neighbouring thresholds over the variance at the higher one:
        near 1 for counts above thresholds, near 0 for counts in bins.
    standard_error : float
    """

    exposures: tuple[int, ...]
    share: float
    standard_error: float

    @property
    def none(self) -> bool:
        """Whether the counts certainly share too few pulses to be above thresholds."""
        highest = self.share + _DEVIATIONS * self.standard_error
        return self.share < _LEAST_SHARED and highest < _CERTAINLY_LESS


def shared_pulses(
    scan: Scan, sound: NDArray[np.bool_], *, without: Collection[int] = ()
) -> SharedPulses | None:
    """Pulses that neighbouring thresholds share, from repeated opens and steps.

    Parameters
    ----------
    scan : Scan
    sound : array of bool, shape (row, column)
    without : collection of int
        Exposures to leave out.

    Returns
    -------
    SharedPulses or None
        None without repeats, or if too little was counted.

    Notes
    -----
    A pulse above a threshold is above all lower ones too. So N(k) = N(k+1) + rest
    with an independent rest for Poisson pulses, and cov(N(k), N(k+1)) =
    var(N(k+1)). Dead time makes it less: the virtual detector has a share of 0.6 with
    a quarter of the pulses lost, of 0.3 with half of them lost.
    Source: J. F. C. Kingman, Poisson Processes, Oxford 1993, ch. 5 (marked points
    are independent Poisson processes; from memory).
    """
    pairs = _pairs(settings_with_repeats(scan, "open", "wedge", without=without))
    both, lower, upper, terms = 0.0, 0.0, 0.0, 0
    for pair in pairs:
        counts = scan.counts.read(pair)[:, :, sound]
        counts = counts[:, :, (counts < scan.count_limit).all(axis=(0, 1))]
        first, second = counts.astype(np.float64)
        if first.shape[1] < 2:
            continue
        level = np.maximum(second.sum(axis=1), 1.0)
        change = first - (first.sum(axis=1) / level)[:, None] * second
        enough = np.flatnonzero(first.mean(axis=1)[1:] >= _FEWEST_COUNTS)
        both += float((change[enough] * change[enough + 1]).sum())
        lower += float((change[enough] ** 2).sum())
        upper += float((change[enough + 1] ** 2).sum())
        terms += enough.size * first.shape[1]
    if upper <= 0.0:
        return None
    return SharedPulses(
        exposures=tuple(i for pair in pairs for i in pair),
        share=both / upper,
        standard_error=float(np.sqrt(lower / upper / terms)),
    )


def _pairs(groups: list[NDArray[np.int64]]) -> list[tuple[int, int]]:
    """Pairs of repeats, no exposure twice, evenly taken from all groups."""
    pairs = [
        (int(a), int(b))
        for group in groups
        for a, b in zip(group[::2], group[1::2], strict=False)
    ]
    if len(pairs) > _MOST_PAIRS:
        chosen = np.linspace(0, len(pairs) - 1, _MOST_PAIRS).astype(int)
        pairs = [pairs[i] for i in chosen]
    return pairs
