"""What each exposure of a scan counts as a whole, one exposure in memory at a time."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.counts_faults import CountFault, count_faults

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ExposureLevels:
    """Levels of n exposures at K thresholds, over the sound pixels only.

    Attributes
    ----------
    mean : array, shape (n, K)
        Mean counts of a sound pixel; entries that cannot be are left out.
    at_limit, no_count, rising : array, shape (n,)
        Share of sound pixels with that fault.
    fingerprint : tuple of str, length n
        Equal for exposures whose counts are the same bit by bit.
    pixels : int
        Number of sound pixels.
    """

    mean: NDArray[np.float64]
    at_limit: NDArray[np.float64]
    no_count: NDArray[np.float64]
    rising: NDArray[np.float64]
    fingerprint: tuple[str, ...]
    pixels: int


def exposure_levels(
    scan: Scan,
    sound: NDArray[np.bool_],
    *,
    progress: Callable[[int, int], None] | None = None,
) -> ExposureLevels:
    """Levels of every exposure.

    Parameters
    ----------
    scan : Scan
    sound : array of bool, shape (row, column)
        Pixels to count in; all, if none is sound.
    progress : callable, optional
        Called with the exposures done and their number.
    """
    n, k, _, _ = scan.shape
    sound = sound if sound.any() else np.ones_like(sound)
    mean = np.zeros((n, k))
    share = {fault: np.zeros(n) for fault in CountFault}
    fingerprint = []
    for i in range(n):
        counts = scan.counts.read([i])
        fingerprint.append(hashlib.sha256(counts.tobytes()).hexdigest())
        pixels = counts[:, :, sound]
        faults = count_faults(pixels, count_limit=scan.count_limit)[0]
        for fault, where in share.items():
            where[i] = np.mean(faults & fault != 0)
        usable = (faults & ~np.uint8(CountFault.RISING)) == 0
        if usable.any():
            mean[i] = pixels[0][:, usable].mean(axis=1)
        if progress is not None:
            progress(i + 1, n)
    return ExposureLevels(
        mean=mean,
        at_limit=share[CountFault.AT_LIMIT],
        no_count=share[CountFault.NOT_A_COUNT],
        rising=share[CountFault.RISING],
        fingerprint=tuple(fingerprint),
        pixels=int(sound.sum()),
    )
