"""No interruption of a series costs more than the block at work."""

from __future__ import annotations

import errno
import os
import signal
import subprocess
import sys
import time
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.series import decompose_series
from spectral.errors import FileFormatError, ScanError
from spectral.scans import maps_parts
from spectral.scans.maps_file import fill_maps, read_maps
from spectral.scans.maps_parts import MapsParts
from spectral.scans.scan_file import file_digest

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.scans.scan import Scan

pytestmark = [pytest.mark.end_to_end, pytest.mark.usefixtures("small_blocks")]

BLOCK = 2
BLOCKS = 5
CHILD = """
import sys, time
from importlib.metadata import entry_points
from spectral.decomposition import series
from spectral.scans.maps_parts import MapsParts
series.MOST_EXPOSURES = {block}
store = MapsParts.put
def slow(self, *block):
    store(self, *block)
    time.sleep({pause})
MapsParts.put = slow
(script,) = entry_points(group="console_scripts", name="wedgewright")
script.load()()
"""


def leftovers(path: Path) -> list[str]:
    return sorted(p.name for p in path.parent.iterdir() if p != path)


def command(folder: Path, output: Path, *more: str) -> list[str]:
    return [
        "decompose",
        str(folder / "calibration.h5"),
        str(folder / "scan.h5"),
        "-o",
        str(output),
        *more,
    ]


def start(folder: Path, output: Path, *, pause: float = 0.0) -> subprocess.Popen[str]:
    """The command in a process of its own, with a pause after each block."""
    return subprocess.Popen(
        [
            sys.executable,
            "-c",
            CHILD.format(block=BLOCK, pause=pause),
            *command(folder, output),
        ],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def wait_for_blocks(child: subprocess.Popen[str], output: Path, blocks: int) -> None:
    unfinished = output.with_name(f".{output.name}.unfinished")
    until = time.monotonic() + 120.0
    while len(list(unfinished.glob("block_*.npz"))) < blocks:
        assert child.poll() is None, child.communicate()[1]
        assert time.monotonic() < until
        time.sleep(0.01)


def raise_at(share: float, error: BaseException) -> Callable[[float], None]:
    def tell(done: float) -> None:
        if done >= share:
            raise error

    return tell


def test_interrupted_run_goes_on(
    decomposer: MaterialDecomposer, scan: Scan, undisturbed: str, tmp_path: Path
) -> None:
    output = tmp_path / "m.h5"
    for share in (0.2, 0.6, 0.8):
        with pytest.raises(KeyboardInterrupt):
            decompose_series(
                decomposer, scan, output,
                progress=raise_at(share, KeyboardInterrupt()),
            )  # fmt: skip
        assert not output.exists()
        assert leftovers(output) == [".m.h5.unfinished"]
    told: list[float] = []
    run = decompose_series(decomposer, scan, output, progress=told.append)
    assert (run.blocks, run.resumed) == (BLOCKS, 4)
    assert told == pytest.approx([0.8, 1.0])
    assert file_digest(output) == undisturbed
    assert leftovers(output) == []


@pytest.mark.slow
def test_killed_runs_give_the_same_file(
    undisturbed: str, folder: Path, tmp_path: Path
) -> None:
    output = tmp_path / "m.h5"
    for blocks in (1, 3):
        child = start(folder, output, pause=0.3)
        wait_for_blocks(child, output, blocks)
        child.send_signal(signal.SIGKILL)
        child.communicate()
        assert child.returncode == -signal.SIGKILL
        assert not output.exists()
    child = start(folder, output)
    _, told = child.communicate()
    assert child.returncode == 0, told
    assert "of 5 blocks of an earlier run" in told
    assert file_digest(output) == undisturbed
    assert leftovers(output) == []


@pytest.mark.slow
def test_interruption_from_the_keyboard_is_told(folder: Path, tmp_path: Path) -> None:
    output = tmp_path / "m.h5"
    child = start(folder, output, pause=0.5)
    wait_for_blocks(child, output, 1)
    child.send_signal(signal.SIGINT)
    out, told = child.communicate()
    assert child.returncode == 130, told
    assert out == ""
    last = told.strip().splitlines()[-1]
    assert last == (
        f"{output}: interrupted; finished blocks are kept, and the same command goes "
        "on from them"
    )
    assert not output.exists()


def test_blocks_without_a_job_are_not_taken_over(
    decomposer: MaterialDecomposer, scan: Scan, undisturbed: str, tmp_path: Path
) -> None:
    # as they would lie there if the machine went while it cleaned up
    output = tmp_path / "m.h5"
    other = MaterialDecomposer(decomposer.calibration, bias_correction=False)
    with pytest.raises(KeyboardInterrupt):
        decompose_series(
            other, scan, output, progress=raise_at(0.6, KeyboardInterrupt())
        )
    (tmp_path / ".m.h5.unfinished" / "job.json").unlink()
    assert decompose_series(decomposer, scan, output).resumed == 0
    assert file_digest(output) == undisturbed


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT])
def test_full_disk_keeps_the_finished_blocks(
    number: int,
    decomposer: MaterialDecomposer,
    scan: Scan,
    undisturbed: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    output = tmp_path / "m.h5"
    save, calls = np.savez, []

    def full(file: Any, **arrays: Any) -> None:
        calls.append(1)
        if len(calls) > 2:
            file.write(b"half a block")
            raise OSError(number, os.strerror(number))
        save(file, **arrays)

    sentence = rf"m.h5: the disk takes no more \({os.strerror(number)}\); finished blo"
    with monkeypatch.context() as patch:
        patch.setattr(np, "savez", full)
        with pytest.raises(ScanError, match=sentence):
            decompose_series(decomposer, scan, output)
    kept = sorted(p.name for p in (tmp_path / ".m.h5.unfinished").iterdir())
    assert kept == ["block_000000.npz", "block_000001.npz", "job.json", "lock"]
    assert decompose_series(decomposer, scan, output).resumed == 2
    assert file_digest(output) == undisturbed


def test_disk_that_fills_up_at_the_end(
    decomposer: MaterialDecomposer,
    scan: Scan,
    undisturbed: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    output = tmp_path / "m.h5"

    def full(file: Any, maps: Any, *, start: int) -> None:
        if start > 2:
            msg = (
                "Can't write data (file write failed: error message = 'No space left')"
            )
            raise OSError(msg)
        fill_maps(file, maps, start=start)

    with monkeypatch.context() as patch:
        patch.setattr(maps_parts, "fill_maps", full)
        with pytest.raises(ScanError, match=r"the disk takes no more .*No space left"):
            decompose_series(decomposer, scan, output)
    assert not output.exists()
    assert not list((tmp_path / ".m.h5.unfinished").glob("*.part"))
    run = decompose_series(decomposer, scan, output)
    assert run.resumed == run.blocks == BLOCKS
    assert file_digest(output) == undisturbed


def test_damaged_block_is_made_again(
    decomposer: MaterialDecomposer, scan: Scan, undisturbed: str, tmp_path: Path
) -> None:
    output = tmp_path / "m.h5"
    with pytest.raises(KeyboardInterrupt):
        decompose_series(
            decomposer, scan, output, progress=raise_at(0.6, KeyboardInterrupt())
        )
    block = tmp_path / ".m.h5.unfinished" / "block_000001.npz"
    stored = bytearray(block.read_bytes())
    stored[len(stored) // 2] ^= 255
    block.write_bytes(stored)
    with pytest.raises(ScanError, match="the disk has damaged a finished block"):
        decompose_series(decomposer, scan, output)
    assert not output.exists()
    assert decompose_series(decomposer, scan, output).resumed == BLOCKS - 1
    assert file_digest(output) == undisturbed


def test_unfinished_output_is_no_maps_file(
    decomposer: MaterialDecomposer, scan: Scan, tmp_path: Path
) -> None:
    output = tmp_path / "m.h5"
    with pytest.raises(KeyboardInterrupt):
        decompose_series(
            decomposer, scan, output, progress=raise_at(0.6, KeyboardInterrupt())
        )
    with pytest.raises(FileFormatError, match="there is no such file"):
        read_maps(output)
    for item in (tmp_path / ".m.h5.unfinished").iterdir():
        with pytest.raises(FileFormatError, match="this is not an HDF5 file"):
            read_maps(item)


def test_what_a_killed_writing_left_is_swept_up(tmp_path: Path) -> None:
    parts = MapsParts(tmp_path / "m.h5", {"options": "none"})
    with parts.held():
        pass
    stale = [parts.folder / name for name in (".m.h5.abc.part", "block_000003.new")]
    for item in stale:
        item.write_bytes(b"half")
    with parts.held():
        assert not any(item.exists() for item in stale)
