"""Maps a few exposures at a time, from memory or from a file of any length."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import FileFormatError, InputError
from spectral.scans.maps import Maps
from spectral.scans.maps_file import read_maps
from spectral.scans.nexus import Node, opened

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

IN_MEMORY = "maps in memory"
_BLOCK_BYTES = 64 << 20


class MapsBlocks:
    """Maps to go through block by block.

    Parameters
    ----------
    source : Maps or path
    exposure : int, optional
        Index in the scan of the only exposure to look at; all by default.

    Raises
    ------
    InputError
        If the maps do not hold that exposure, or none at all.
    FileFormatError
        If a file holds no maps.
    """

    def __init__(
        self, source: Maps | str | Path, *, exposure: int | None = None
    ) -> None:
        self._source = source
        if isinstance(source, Maps):
            self.name = IN_MEMORY
            listed = source.exposure
            self._bytes_each = source.areal_density[:1].nbytes
        else:
            self.name = str(source)
            listed, self._bytes_each = _file_extent(Path(source))
        if len(listed) == 0:
            msg = f"{self.name}: the maps hold no exposure"
            raise InputError(msg)
        self.positions = _positions(self.name, listed, exposure)
        self.exposure: NDArray[np.int32] = listed[self.positions]

    def __iter__(self) -> Iterator[Maps]:
        """Blocks of the chosen exposures, in order."""
        size = max(1, _BLOCK_BYTES // max(5 * self._bytes_each, 1))
        for start in range(0, len(self.positions), size):
            yield self._read(self.positions[start : start + size])

    def _read(self, which: NDArray[np.int64]) -> Maps:
        if isinstance(self._source, Maps):
            return maps_at(self._source, which)
        return read_maps(self._source, which=which)


def maps_at(maps: Maps, which: NDArray[np.int64]) -> Maps:
    """The maps at some positions along the exposure axis."""
    return replace(
        maps,
        exposure=maps.exposure[which],
        areal_density=maps.areal_density[which],
        areal_density_errors=maps.areal_density_errors[which],
        covariance=maps.covariance[which],
        calibration_errors=maps.calibration_errors[which],
        deviance=maps.deviance[which],
        flags=maps.flags[which],
    )


def _positions(
    name: str, listed: NDArray[np.int32], exposure: int | None
) -> NDArray[np.int64]:
    if exposure is None:
        return np.arange(len(listed))
    found = np.flatnonzero(listed == exposure)
    if found.size == 0:
        msg = (
            f"{name}: exposure {exposure} is not among the maps' exposures "
            f"({listed.min()} to {listed.max()})"
        )
        raise InputError(msg)
    return found[:1]


def _file_extent(path: Path) -> tuple[NDArray[np.int32], int]:
    """Exposures of a file, and the bytes of one exposure's areal densities."""
    with opened(path) as file:
        for entry in Node(str(path), file).children("NXentry"):
            for group in entry.children("NXdata"):
                if group.has("areal_density"):
                    shape = group.dataset("areal_density").shape
                    listed = group.values("exposure").astype(np.int32)
                    return listed, 4 * int(np.prod(shape[1:]))
    msg = f"{path}: no NXdata group holds areal_density, so these are no maps"
    raise FileFormatError(msg)
