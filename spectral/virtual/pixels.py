"""What each pixel of a virtual detector truly is."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.virtual.detector import BadPixelShares, VirtualDetector

UNSTABLE_JUMP_KEV = 4.0
STUCK_BELOW = 4000
NOISY_TIMES = (3.0, 5.0)


class PixelKind(IntEnum):
    """How a pixel behaves."""

    GOOD = 0
    DEAD = 1
    STUCK = 2
    NOISY = 3
    UNSTABLE = 4
    BROKEN_COLUMN = 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TruePixels:
    """The true properties of each pixel.

    Attributes
    ----------
    thresholds_kev : array, shape (threshold, row, column), in keV
        On the scale of a pixel with gain 1.
    gain, area : array, shape (row, column)
    noise_kev : array, shape (row, column), in keV
    pulse_time_ns : array, shape (row, column), in ns
        Width, decay time or peaking time, by the detector's pulse shape.
    kind : array of uint8, shape (row, column)
        `PixelKind`.
    stuck_count : array, shape (row, column)
        What a stuck pixel shows.
    """

    thresholds_kev: NDArray[np.float64]
    gain: NDArray[np.float64]
    area: NDArray[np.float64]
    noise_kev: NDArray[np.float64]
    pulse_time_ns: NDArray[np.float64]
    kind: NDArray[np.uint8]
    stuck_count: NDArray[np.int64]


def draw_pixels(
    detector: VirtualDetector,
    thresholds_kev: NDArray[np.float64],
    shape: tuple[int, int],
    rng: np.random.Generator,
) -> TruePixels:
    """Pixels drawn from a detector's description.

    Parameters
    ----------
    detector : VirtualDetector
    thresholds_kev : array, shape (threshold,), in keV
        Nominal settings, rising.
    shape : (row, column)
    rng : np.random.Generator

    Returns
    -------
    TruePixels

    Raises
    ------
    InputError
        If the spread makes a threshold pass its neighbour or zero.
    """
    spread = detector.spread
    nominal = np.asarray(thresholds_kev, dtype=np.float64)
    common = spread.threshold_common_kev * rng.standard_normal(shape)
    single = spread.threshold_kev * rng.standard_normal((nominal.size, *shape))
    thresholds = nominal[:, None, None] + common + single
    if thresholds[0].min() <= 0.0 or np.any(np.diff(thresholds, axis=0) <= 0.0):
        msg = (
            f"thresholds {nominal.tolist()} keV are too close or too low for a spread "
            f"of {spread.threshold_kev:g} and {spread.threshold_common_kev:g} keV"
        )
        raise InputError(msg)
    kind = _draw_kinds(detector.bad_pixels, shape, rng)
    noise = detector.noise_kev * _around_one(spread.noise, shape, rng)
    times = rng.uniform(*NOISY_TIMES, shape)
    return TruePixels(
        thresholds_kev=thresholds,
        gain=_around_one(spread.gain, shape, rng),
        area=_around_one(spread.area, shape, rng),
        noise_kev=np.where(kind == PixelKind.NOISY, times * noise, noise),
        pulse_time_ns=detector.pulse_time_ns
        * _around_one(spread.dead_time, shape, rng),
        kind=kind,
        stuck_count=rng.integers(0, STUCK_BELOW, shape),
    )


def jumps_kev(pixels: TruePixels, rng: np.random.Generator) -> NDArray[np.float64]:
    """Threshold offsets of the unstable pixels in one exposure, shape (row, column)."""
    sign = rng.choice([-1.0, 0.0, 1.0], pixels.kind.shape)
    unstable = pixels.kind == PixelKind.UNSTABLE
    return np.where(unstable, UNSTABLE_JUMP_KEV * sign, 0.0)


def _around_one(
    spread: float, shape: tuple[int, int], rng: np.random.Generator
) -> NDArray[np.float64]:
    """Factors around 1, cut at four standard deviations and at 0.2."""
    normal = np.clip(rng.standard_normal(shape), -4.0, 4.0)
    return np.maximum(1.0 + spread * normal, 0.2)


def _draw_kinds(
    shares: BadPixelShares, shape: tuple[int, int], rng: np.random.Generator
) -> NDArray[np.uint8]:
    """Kind of each pixel."""
    kind = np.zeros(shape, np.uint8)
    place = rng.random(shape)
    reached = 0.0
    for name in (PixelKind.DEAD, PixelKind.STUCK, PixelKind.NOISY, PixelKind.UNSTABLE):
        share = getattr(shares, name.name.lower())
        kind[(place >= reached) & (place < reached + share)] = name
        reached += share
    rows, columns = shape
    broken = min(shares.broken_columns, columns)
    for column in rng.choice(columns, broken, replace=False):
        start = int(rng.integers(rows // 4, max(rows // 4 + 1, 3 * rows // 4)))
        kind[start:, column] = PixelKind.BROKEN_COLUMN
    return kind
