"""Finished blocks of maps on disk, until all are there and make one file.

A block is stored under a name of its own and appears only when it is complete; the
maps file appears only when all blocks have gone into it. So an interruption at any
moment costs the block at work, and an unfinished output cannot be taken for maps.
"""

from __future__ import annotations

import fcntl
import json
import os
import shutil
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.errors import ScanError
from spectral.scans.maps_file import check_flags, create_maps, fill_maps, write_process
from spectral.scans.nexus import written_whole

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence
    from pathlib import Path

    from spectral.decomposition.maps import Maps

FIELDS = (
    "exposure",
    "areal_density",
    "areal_density_errors",
    "covariance",
    "calibration_errors",
    "deviance",
    "flags",
)


class MapsParts:
    """Blocks of maps beside the file that they will become.

    Parameters
    ----------
    path : Path
        The maps file to be.
    job : dict
        What is being done, ready for JSON: blocks of another job are refused.

    Raises
    ------
    ScanError
        If another run is writing the same output, or blocks of another job lie there.
    """

    def __init__(self, path: Path, job: dict[str, Any]) -> None:
        self.path = path
        self.folder = path.with_name(f".{path.name}.unfinished")
        self.job = job

    @contextmanager
    def held(self) -> Iterator[MapsParts]:
        """Hold the output for one run; the hold ends with the process."""
        self.folder.mkdir(exist_ok=True)
        with (self.folder / "lock").open("w") as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError as error:
                msg = (
                    f"{self.path}: another run is writing this output; wait for it or "
                    "name another output"
                )
                raise ScanError(msg) from error
            self._claim()
            yield self

    def _claim(self) -> None:
        """Write down the job, or compare with the one that lies there."""
        record = self.folder / "job.json"
        text = json.dumps(self.job, indent=1, sort_keys=True)
        if not record.exists():
            _replace_text(record, text)
            return
        if record.read_text() != text:
            msg = (
                f"{self.path}: unfinished maps of another job lie in {self.folder}; "
                "finish that job, delete the folder, or name another output"
            )
            raise ScanError(msg)

    def _part(self, block: int) -> Path:
        return self.folder / f"block_{block:06d}.npz"

    def has(self, block: int) -> bool:
        """Whether a block is already there."""
        return self._part(block).exists()

    def put(self, block: int, maps: Maps) -> None:
        """Store a block; it appears when it is complete."""
        check_flags(maps)
        part = self._part(block)
        new = part.with_suffix(".new")
        try:
            with new.open("wb") as file:
                np.savez(file, **{name: getattr(maps, name) for name in FIELDS})
                file.flush()
                os.fsync(file.fileno())
            new.replace(part)
        finally:
            new.unlink(missing_ok=True)

    def finish(
        self, material: Sequence[str], blocks: int, process: dict[str, str]
    ) -> None:
        """Make the maps file of all blocks, in order, and remove them."""
        exposure = np.concatenate(
            [self._read(block, ("exposure",))["exposure"] for block in range(blocks)]
        )
        with written_whole(self.path) as file:
            start = 0
            for block in range(blocks):
                maps = _block(material, self._read(block, FIELDS))
                if block == 0:
                    create_maps(
                        file,
                        material=material,
                        exposure=exposure,
                        pixels=maps.deviance.shape[1:],
                    )
                fill_maps(file, maps, start=start)
                start += len(maps.exposure)
            write_process(file, process)
        shutil.rmtree(self.folder)

    def _read(self, block: int, names: Sequence[str]) -> dict[str, Any]:
        with np.load(self._part(block)) as stored:
            return {name: stored[name] for name in names}


def _block(material: Sequence[str], arrays: dict[str, Any]) -> Maps:
    from spectral.decomposition.maps import Maps  # noqa: PLC0415 - maps know no files

    return Maps(material=tuple(material), **arrays)


def _replace_text(path: Path, text: str) -> None:
    new = path.with_suffix(".new")
    new.write_text(text)
    new.replace(path)
