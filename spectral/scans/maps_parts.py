"""Finished blocks of maps on disk, until all are there and make one file.

A block is stored under a name of its own and appears only when it is complete; the
maps file appears only when all blocks have gone into it. So an interruption at any
moment costs the block at work, and an unfinished output cannot be taken for maps.
"""

from __future__ import annotations

import fcntl
import json
import os
import zipfile
from contextlib import contextmanager, suppress
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.errors import ScanError
from spectral.scans.maps import Maps
from spectral.scans.maps_file import (
    CHUNK_EXPOSURES,
    check_flags,
    create_maps,
    fill_maps,
    write_process,
)
from spectral.scans.nexus import on_disk, written_whole

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping, Sequence
    from pathlib import Path

FIELDS = (
    "exposure",
    "areal_density",
    "areal_density_errors",
    "covariance",
    "calibration_errors",
    "deviance",
    "flags",
)
JOB = "job.json"
LOCK = "lock"


class MapsParts:
    """Blocks of maps beside the file that they will become.

    Parameters
    ----------
    path : Path
        The maps file to be.
    job : mapping of str to str
        What is being done, each fact under a word for people: blocks of another job
        are refused.

    Raises
    ------
    ScanError
        If another run is writing the same output, blocks of another job lie there, or
        the disk takes no more.
    """

    def __init__(self, path: Path, job: Mapping[str, str]) -> None:
        self.path = path
        self.folder = path.with_name(f".{path.name}.unfinished")
        self.job = dict(job)

    @contextmanager
    def held(self) -> Iterator[MapsParts]:
        """Hold the output for one run; the hold ends with the process."""
        if self.folder.exists() and not self.folder.is_dir():
            msg = (
                f"{self.path}: {self.folder} is in the way of unfinished maps; move it "
                "away or name another output"
            )
            raise ScanError(msg)
        self.folder.mkdir(exist_ok=True)
        with (self.folder / LOCK).open("w") as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError as error:
                msg = (
                    f"{self.path}: another run is writing this output; wait for it or "
                    "name another output"
                )
                raise ScanError(msg) from error
            with self._kept():
                self._claim()
            try:
                yield self
            except BaseException:
                self._leave_if_empty()
                raise
        # a disk shared by several machines may keep the name of a file while it is open
        with suppress(OSError):
            self.folder.rmdir()

    def _leave_if_empty(self) -> None:
        """Remove the folder of a run that ends before its first block."""
        with suppress(OSError):
            if not any(self.folder.glob("block_*.npz")):
                self._remove(lambda name: name != LOCK)
                (self.folder / LOCK).unlink()
                self.folder.rmdir()

    def _claim(self) -> None:
        """Write down the job, or compare with the one that lies there."""
        record = self.folder / JOB
        if record.exists():
            try:
                there = json.loads(record.read_text())
            except ValueError as error:
                msg = (
                    f"{self.path}: the record {record} of unfinished maps is damaged; "
                    f"delete {self.folder} and start again"
                )
                raise ScanError(msg) from error
            differs = _differing(there, self.job)
            if differs:
                msg = (
                    f"{self.path}: unfinished maps of another job lie in {self.folder} "
                    f"(other {' and '.join(differs)}); finish that job, delete the "
                    "folder, or name another output"
                )
                raise ScanError(msg)
            self._remove(lambda name: name.endswith((".new", ".part")))
            return
        self._remove(lambda name: name != LOCK)
        new = record.with_suffix(".new")
        new.write_text(json.dumps(self.job, indent=1, sort_keys=True))
        on_disk(new)
        new.replace(record)
        on_disk(self.folder)

    def _remove(self, which: Any) -> None:
        for item in self.folder.iterdir():
            if which(item.name):
                item.unlink()

    @contextmanager
    def _kept(self) -> Iterator[None]:
        """Say, when the disk takes no more, that what is there stays there."""
        try:
            yield
        except (OSError, RuntimeError) as error:  # h5py raises either
            number = getattr(error, "errno", None)
            why = os.strerror(number) if number else " ".join(str(error).split())
            msg = (
                f"{self.path}: the disk takes no more ({why}); finished blocks are kept "
                f"in {self.folder}: make room, then the same command goes on from them"
            )
            raise ScanError(msg) from error

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
            with self._kept():
                with new.open("wb") as file:
                    np.savez(file, **{name: getattr(maps, name) for name in FIELDS})
                on_disk(new)
                new.replace(part)
        finally:
            new.unlink(missing_ok=True)

    def finish(
        self,
        material: Sequence[str],
        blocks: int,
        process: dict[str, str],
        *,
        tell: Callable[[float], None],
    ) -> None:
        """Make the maps file of all blocks, in order, and remove them.

        `tell` is called with the share that is written.
        """
        exposures = [self._read(b, ("exposure",))["exposure"] for b in range(blocks)]
        with self._kept(), written_whole(self.path, folder=self.folder) as file:
            start = 0
            for block in range(blocks):
                maps = _block(material, self._read(block, FIELDS))
                if block == 0:
                    create_maps(
                        file,
                        material=material,
                        exposure=np.concatenate(exposures),
                        pixels=maps.deviance.shape[1:],
                        at_once=len(maps.exposure),
                    )
                fill_maps(file, maps, start=start)
                start += len(maps.exposure)
                tell((block + 1) / blocks)
            write_process(file, process)
        # the job's name goes last: blocks without one would not be known for what they are
        self._remove(lambda name: name not in {JOB, LOCK})
        for name in (JOB, LOCK):
            (self.folder / name).unlink()

    def _read(self, block: int, names: Sequence[str]) -> dict[str, Any]:
        part = self._part(block)
        try:
            with np.load(part) as stored:
                return {name: stored[name] for name in names}
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile) as error:
            part.unlink(missing_ok=True)
            msg = (
                f"{self.path}: the disk has damaged a finished block, which is now "
                "removed; give the same command again to make up for it"
            )
            raise ScanError(msg) from error


def exposures_at_once(fitting: int) -> int:
    """Exposures in a block of which so many fit: whole chunks if more than one."""
    if fitting <= CHUNK_EXPOSURES:
        return max(fitting, 1)
    return fitting - fitting % CHUNK_EXPOSURES


def _block(material: Sequence[str], arrays: dict[str, Any]) -> Maps:
    return Maps(material=tuple(material), **arrays)


def _differing(one: dict[str, str], other: dict[str, str]) -> list[str]:
    return sorted(k for k in one.keys() | other.keys() if one.get(k) != other.get(k))
