"""How bin counts scatter together when pulses overlap above a threshold."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from spectral.physics.pileup import NS, PulseShape

if TYPE_CHECKING:
    from numpy.typing import NDArray

GROUPS = 40
"""Pulse heights that pairs are made of."""
DELAYS, POINTS, RATIOS = 40, 240, 41
WIDEST_RATIO = 50.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PulsePairs:
    """Two pulses one after the other; the first has height 1.

    Attributes
    ----------
    log_ratio : array, shape (ratio,)
        Logarithm of the second height, evenly spaced.
    duration : array, shape (delay,)
        Share of the time that each delay stands for, in time constants.
    apart : array of bool, shape (delay, ratio)
        The signal falls and rises again between the two.
    first, valley, second : arrays, shape (delay, ratio)
        Two peaks and the lowest signal between them, over the sum of the heights.
    """

    log_ratio: NDArray[np.float64]
    duration: NDArray[np.float64]
    apart: NDArray[np.bool_]
    first: NDArray[np.float64]
    valley: NDArray[np.float64]
    second: NDArray[np.float64]


@lru_cache(maxsize=8)
def pulse_pairs(order: float) -> PulsePairs:
    """Peaks and valleys of pairs of semi-Gaussian pulses, on a grid of time."""
    edge = np.linspace(0.0, 1.0, DELAYS + 1) ** 1.2
    edge *= order + 3.0 * np.sqrt(order) + 8.0
    delay = 0.5 * (edge[1:] + edge[:-1])
    since = np.linspace(0.0, 1.0, POINTS + 1) ** 1.3
    since *= order + 5.0 * np.sqrt(order) + 2.0
    widest = np.log(WIDEST_RATIO)
    log_ratio = np.linspace(-widest, widest, RATIOS)

    def pulse(t: NDArray[np.float64]) -> NDArray[np.float64]:
        safe = np.maximum(t, 1e-300)
        return np.asarray(np.exp(order * (np.log(safe / order) + 1.0) - t))

    signal = pulse(delay[:, None, None] + since)
    signal = signal + np.exp(log_ratio)[:, None] * pulse(since)
    slope = np.diff(signal, axis=2)
    fallen = np.logical_or.accumulate(slope < 0.0, axis=2)
    past = np.broadcast_to((delay > order)[:, None, None], (*slope.shape[:2], 1))
    rises = (slope > 0.0) & np.concatenate([past, fallen[:, :, :-1]], axis=2)
    lowest = rises.argmax(axis=2)[:, :, None]
    place = np.arange(POINTS + 1)
    whole = 1.0 + np.exp(log_ratio)
    before = np.where(place <= lowest, signal, 0.0).max(axis=2)
    after = np.where(place >= lowest, signal, 0.0).max(axis=2)
    return PulsePairs(
        log_ratio=log_ratio,
        duration=np.diff(edge),
        apart=rises.any(axis=2),
        first=np.maximum(before, 1.0) / whole,
        valley=np.take_along_axis(signal, lowest, axis=2)[:, :, 0] / whole,
        second=after / whole,
    )


def overlap_covariance(
    pulses: NDArray[np.float64],
    shape: PulseShape,
    levels_kev: NDArray[np.float64],
    *,
    step_kev: float,
) -> NDArray[np.float64]:
    r"""What overlapping pulses add to the covariance of the bins, per second.

    Parameters
    ----------
    pulses : array, shape (case, grid), in 1/s
        Rate of pulses of each height on a grid of ``step_kev`` that starts at 0.
    shape : PulseShape
    levels_kev : array, shape (bin,), in keV
        Thresholds, the lowest first.
    step_kev : float

    Returns
    -------
    array, shape (case, bin, bin), in 1/s
        To be added to diag(l) - c l l^T. Rows add up to 0.

    Notes
    -----
    While the signal stays above the lowest threshold it is counted once there, so
    such excursions come like the pulses of a counter with dead time. One with two
    peaks in bins p and q and a valley in bin v counts c = e_p + e_q - e_v: its bins
    add c c^T instead of diag(c), which is more by (e_p - e_v)(e_q - e_v)^T and its
    transpose. Summed here over pairs of pulses: first order in the rate of overlaps.
    Source: derived here; law of total covariance.
    """
    bins = levels_kev.size
    out = np.zeros((pulses.shape[0], bins, bins))
    lit = np.flatnonzero(pulses[:, 1:].any(axis=0))
    if shape.tail_ns == 0.0 or lit.size == 0:
        return out
    rate, energy = _grouped(pulses[:, : int(lit[-1]) + 2], step_kev)
    pairs = pulse_pairs(shape.order)
    whole = energy[:, None] + energy
    ratio = np.log(energy / energy[:, None]) - pairs.log_ratio[0]
    ratio = ratio / (pairs.log_ratio[1] - pairs.log_ratio[0])
    ratio = np.clip(ratio, 0.0, RATIOS - 1.001)
    cell = ratio.astype(np.int64)
    part = ratio - cell
    near = np.rint(ratio).astype(np.int64)
    both = (rate[:, :, None] * rate[:, None, :]).reshape(rate.shape[0], -1)
    one = np.eye(bins + 1)
    for d, duration in enumerate(pairs.duration):

        def where(table: NDArray[np.float64], d: int = d) -> NDArray[np.int64]:
            height = (1.0 - part) * table[d, cell] + part * table[d, cell + 1]
            place = np.searchsorted(levels_kev, (height * whole).ravel(), side="right")
            return np.asarray(place, np.int64)

        valley = where(pairs.valley)
        counts = pairs.apart[d, near].ravel() & (valley > 0)
        first = one[where(pairs.first)] - one[valley]
        second = one[where(pairs.second)] - one[valley]
        weight = both * counts * (duration * shape.tail_ns * NS)
        product = first[:, 1:, None] * second[:, None, 1:]
        out += np.tensordot(weight, product, axes=1)
    return out + out.transpose(0, 2, 1)


def _grouped(
    pulses: NDArray[np.float64], step_kev: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Rates (case, group) of groups of pulse heights, and the heights in keV."""
    place = np.arange(1, pulses.shape[1])
    group = (place - 1) * GROUPS // max(place.size, GROUPS)
    member = (group[:, None] == np.arange(group[-1] + 1)).astype(float)
    middle = (place @ member) / member.sum(axis=0)
    return pulses[:, 1:] @ member, step_kev * middle
