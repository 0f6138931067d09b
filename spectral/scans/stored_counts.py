"""Counts that stay on disk until asked for, and what their integers can hold."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.errors import FileFormatError
from spectral.scans.nexus import opened

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    import h5py
    from numpy.typing import NDArray

#: Stands where a file holds something that is no count: negative, NaN, a fraction.
NOT_A_COUNT = 2**32 - 1

_SAMPLED_EXPOSURES = 12
_FEWEST_AT_STOP = 4
_LOWEST_STOP = 2**4 - 1


@dataclass(frozen=True, slots=True)
class CountsInFile:
    """Counts of an HDF5 file, one dataset (exposure, row, column) a threshold.

    The file is opened anew for each read, so that threads may read at once and
    nothing stays open.

    Attributes
    ----------
    path : Path
    datasets : tuple of str
        Full names, in order of rising threshold.
    shape : (exposure, threshold, row, column)
    """

    path: Path
    datasets: tuple[str, ...]
    shape: tuple[int, int, int, int]

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Counts of the named exposures, shape (exposure, threshold, row, column).

        Raises
        ------
        FileFormatError
            If the file has gone, changed its shape, or is damaged.
        """
        wanted = np.asarray(exposures, dtype=np.int64)
        _, k, y, x = self.shape
        out = np.empty((len(wanted), k, y, x), np.uint32)
        with opened(self.path) as file:
            for j, name in enumerate(self.datasets):
                _read_exposures(self.path, file, name, wanted, out[:, j])
        return out


def _read_exposures(
    path: Path,
    file: h5py.File,
    name: str,
    wanted: NDArray[np.int64],
    out: NDArray[np.uint32],
) -> None:
    """Fill out[i] with exposure wanted[i], reading each run of neighbours at once."""
    order = np.argsort(wanted, kind="stable")
    breaks = np.flatnonzero(np.diff(wanted[order]) > 1) + 1
    try:
        dataset = file[name]
        for run in np.split(order, breaks):
            if len(run) == 0:
                continue
            first, last = int(wanted[run[0]]), int(wanted[run[-1]])
            block = as_counts(dataset[first : last + 1])
            out[run] = block[wanted[run] - first]
    except (OSError, KeyError, IndexError) as error:
        msg = (
            f"{path}: {name} cannot be read, the file is damaged or has changed "
            f"since it was opened; copy it again ({error})"
        )
        raise FileFormatError(msg) from error


def as_counts(raw: NDArray[Any]) -> NDArray[np.uint32]:
    """Stored numbers as uint32; `NOT_A_COUNT` where one is not a count.

    Nothing is repaired: negative values, NaN, fractions and numbers beyond 32 bits
    all become the largest value, which every later step takes as a fault.
    """
    if raw.dtype.kind == "u" and raw.dtype.itemsize <= 4:
        return raw.astype(np.uint32)
    if raw.dtype.kind == "u":
        good = raw < NOT_A_COUNT
    elif raw.dtype.kind == "i":
        good = (raw >= 0) & (raw < NOT_A_COUNT)
    else:
        good = (raw >= 0) & (raw < NOT_A_COUNT) & (raw == np.floor(raw))
    return np.where(good, np.where(good, raw, 0).astype(np.uint32), NOT_A_COUNT).astype(
        np.uint32
    )


def storage_limit(dtype: np.dtype[Any]) -> int:
    """Largest count that a stored number type can hold."""
    if dtype.kind in "iu":
        return min(int(np.iinfo(dtype).max), NOT_A_COUNT)
    return NOT_A_COUNT


def sampled_exposures(n: int) -> NDArray[np.int64]:
    """A few exposures spread over a scan, first and last among them."""
    return np.unique(np.linspace(0, n - 1, min(n, _SAMPLED_EXPOSURES)).astype(np.int64))


def upper_end(image: NDArray[np.uint32]) -> NDArray[np.uint32]:
    """The values near an image's largest one: all that `counter_stop` looks at."""
    valid = image[image != NOT_A_COUNT]
    top = int(valid.max(initial=0))
    if top < _LOWEST_STOP:
        return np.empty(0, np.uint32)
    upper: NDArray[np.uint32] = valid[valid >= top - _window(top)]
    return upper


def _window(top: int) -> int:
    return max(4, (top + 1) // 64)


def counter_stop(counts: NDArray[np.uint32], *, storage: int) -> int:
    """Value at which the counter itself stopped, or what its storage can hold.

    A counter of b bits that stops when full leaves many entries at exactly
    2**b - 1 and none above. Chance leaves no such pile: where a smooth
    distribution ends, the last value is met no more often than the ones before.

    Parameters
    ----------
    counts : array of any shape
    storage : int
        Largest value of the stored integer type.
    """
    valid = counts[counts != NOT_A_COUNT]
    if valid.size == 0:
        return storage
    top = int(valid.max())
    if top >= storage or top < _LOWEST_STOP or (top + 1) & top:
        return storage
    at_top = int(np.count_nonzero(valid == top))
    below = _window(top)
    just_below = np.count_nonzero((valid >= top - below) & (valid < top))
    expected = just_below / below
    pile = at_top > 2.0 * expected + 5.0 * np.sqrt(expected)
    return top if at_top >= _FEWEST_AT_STOP and pile else storage


def mostly_fractions(raw: NDArray[Any]) -> bool:
    """Whether the numbers are averages or corrected values, not counts."""
    if raw.dtype.kind != "f":
        return False
    finite = raw[np.isfinite(raw)]
    return bool(finite.size) and bool(np.mean(finite != np.floor(finite)) > 0.5)
