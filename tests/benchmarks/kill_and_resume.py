"""Kill a series at random moments, start it again, and compare the finished files.

Run ``python tests/benchmarks/kill_and_resume.py``; see README.md beside it.
"""

from __future__ import annotations

import argparse
import os
import runpy
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from spectral.calibration.calibration_file import write_calibration
from spectral.scans.scan_file import file_digest, write_scan

MADE = runpy.run_path(str(Path(__file__).parents[1] / "conftest.py"))
CHILD = """
from importlib.metadata import entry_points
from spectral.decomposition import series
series.MOST_EXPOSURES = 2
(script,) = entry_points(group="console_scripts", name="wedgewright")
script.load()()
"""


def start(folder: Path, output: Path) -> subprocess.Popen[str]:
    """The command in a process of its own."""
    files = [str(folder / "calibration.h5"), str(folder / "scan.h5")]
    return subprocess.Popen(
        [sys.executable, "-c", CHILD, "decompose", *files, "-o", str(output)],
        env={**os.environ, "SOURCE_DATE_EPOCH": "1700000000"},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def killed_runs(
    folder: Path, undisturbed: str, duration: float, kills: int, seed: int
) -> None:
    """Kill runs on one output until they were killed so often, then let one end."""
    rng = np.random.default_rng(seed)
    output = folder / "killed.h5"
    unfinished = folder / ".killed.h5.unfinished"
    killed = finished = 0
    while killed < kills:
        child = start(folder, output)
        # the moments lie closer to the end, where the blocks become one file
        moment = duration * rng.triangular(0.1, 0.9, 1.05)
        try:
            child.wait(moment)
        except subprocess.TimeoutExpired:
            child.send_signal(signal.SIGKILL)
            child.communicate()
            killed += 1
            blocks = len(list(unfinished.glob("block_*.npz")))
            sys.stdout.write(
                f"kill {killed} after {moment:.2f} s: {blocks} blocks kept, output "
                f"{'there' if output.exists() else 'not there'}\n"
            )
            sys.stdout.flush()
        else:
            finished += 1
        if output.exists():
            same(output, undisturbed)
            output.unlink()
    child = start(folder, output)
    _, told = child.communicate()
    if child.returncode != 0:
        raise SystemExit(told)
    same(output, undisturbed)
    left = sorted(p.name for p in folder.iterdir() if "killed" in p.name)
    sys.stdout.write(f"{killed} kills, {finished + 1} finished, left beside: {left}\n")


def same(output: Path, undisturbed: str) -> None:
    """End with a message unless the file is that of the undisturbed run."""
    if file_digest(output) != undisturbed:
        msg = f"{output} differs from that of the undisturbed run"
        raise SystemExit(msg)


def full_disk(folder: Path, undisturbed: str, mib: float) -> None:
    """Let a disk in memory fill up, make it larger, go on (needs the right to mount)."""
    disk = folder / "disk"
    disk.mkdir()
    output = disk / "maps.h5"
    subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={int(mib * 1024)}k", "tmpfs", str(disk)],
        check=True,
    )
    try:
        for size in (mib, 1.5 * mib, 50 * mib):
            subprocess.run(
                ["mount", "-o", f"remount,size={int(size * 1024)}k", str(disk)],
                check=True,
            )
            child = start(folder, output)
            _, told = child.communicate()
            sys.stdout.write(f"{size:.1f} MiB: exit {child.returncode}: {told}")
        same(output, undisturbed)
    finally:
        subprocess.run(["umount", str(disk)], check=True)


def main() -> None:
    """Make a series, time it undisturbed, then kill it."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--side", type=int, default=96)
    parser.add_argument("--objects", type=int, default=60)
    parser.add_argument("--kills", type=int, default=20)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--full-disk", type=float, metavar="MIB", default=0.0)
    words = parser.parse_args()
    with tempfile.TemporaryDirectory(prefix="kill_and_resume_") as name:
        folder = Path(name)
        calibration = MADE["made_up_calibration"]((words.side, words.side))
        write_calibration(calibration, folder / "calibration.h5")
        write_scan(
            MADE["made_up_series"](calibration, words.objects), folder / "scan.h5"
        )
        durations = []
        for _ in range(2):
            began = time.monotonic()
            child = start(folder, folder / "undisturbed.h5")
            _, told = child.communicate()
            if child.returncode != 0:
                raise SystemExit(told)
            durations.append(time.monotonic() - began)
        undisturbed = file_digest(folder / "undisturbed.h5")
        size = (folder / "undisturbed.h5").stat().st_size / 2**20
        sys.stdout.write(
            f"undisturbed: {durations[-1]:.2f} s, {size:.1f} MiB, {undisturbed}\n"
        )
        if words.full_disk:
            full_disk(folder, undisturbed, words.full_disk)
        killed_runs(folder, undisturbed, durations[-1], words.kills, words.seed)


if __name__ == "__main__":
    main()
