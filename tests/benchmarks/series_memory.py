"""Peak memory and time of series of growing length, each in a process of its own.

Run ``python tests/benchmarks/series_memory.py``; see README.md beside it.
"""

from __future__ import annotations

import argparse
import json
import resource
import runpy
import shutil
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.series import decompose_series
from spectral.scans.scan_file import read_scan, write_scan

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.scans.scan import CountSource, Scan

MADE = runpy.run_path(str(Path(__file__).parents[1] / "conftest.py"))
DRAWN = 4
"""Different object exposures; a long series repeats them."""


@dataclass(frozen=True, slots=True, eq=False)
class Repeated:
    """Counts of a short series told as a long one."""

    short: CountSource
    places: NDArray[np.int64]

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(exposure, threshold, row, column)."""
        return len(self.places), *self.short.shape[1:]

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Counts of the named exposures."""
        return self.short.read(self.places[np.asarray(exposures)])


def long_series(short: Scan, objects: int) -> Scan:
    """The object exposures of a short series again and again."""
    before, seen = short.exposures("dark", "open")[:3], short.exposures("object")
    after = short.exposures("open")[2:]
    places = np.concatenate([before, np.resize(seen, objects), after])
    assert short.current_ma is not None
    return replace(
        short,
        counts=Repeated(short.counts, places),
        role=tuple(short.role[i] for i in places),
        thickness_mm=short.thickness_mm[places],
        count_time_s=short.count_time_s[places],
        current_ma=short.current_ma[places],
    )


def decompose(folder: Path, objects: int) -> None:
    """Decompose the first exposures and print what that took (runs alone)."""
    scan = read_scan(folder / "scan.h5")
    chosen = scan.exposures("object")[:objects].tolist()
    decomposer = MaterialDecomposer(read_calibration(folder / "calibration.h5"))
    began = time.monotonic()
    marks: list[float] = []
    decompose_series(
        decomposer, scan, folder / "maps.h5", exposures=chosen,
        progress=lambda _: marks.append(time.monotonic()),
    )  # fmt: skip
    ended = time.monotonic()
    usage = resource.getrusage(resource.RUSAGE_SELF)
    result = {
        "exposures": len(chosen),
        "prepare_s": marks[0] - began,
        "blocks_s": marks[-1] - marks[0],
        "file_s": ended - marks[-1],
        "cpu_s": usage.ru_utime + usage.ru_stime,
        "peak_mib": usage.ru_maxrss / 1024,
        "maps_mb": (folder / "maps.h5").stat().st_size / 1e6,
        **reading_times(folder / "maps.h5"),
    }
    sys.stdout.write(json.dumps(result))


def reading_times(path: Path) -> dict[str, float]:
    """Seconds that one exposure and one pixel's series take to open."""
    times = {}
    for name, where in (
        ("exposure_s", (-1, slice(None))),
        ("pixel_s", (slice(None), slice(None), 5, 7)),
    ):
        began = time.monotonic()
        with h5py.File(path) as file:
            np.asarray(file["entry/maps/areal_density"][where])
        times[name] = time.monotonic() - began
    return times


def alone(folder: Path, objects: int) -> dict[str, Any]:
    """`decompose` in a process of its own: the peak is that of this run."""
    done = subprocess.run(
        [sys.executable, __file__, "--in", str(folder), "--objects", str(objects)],
        check=True,
        capture_output=True,
        text=True,
    )
    found: dict[str, Any] = json.loads(done.stdout)
    return found


def main() -> None:
    """Make a series, decompose parts of it, print a table, remove it all."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=256)
    parser.add_argument("--columns", type=int, default=1024)
    parser.add_argument("--objects", type=int, default=300)
    parser.add_argument("--shares", type=float, nargs="+", default=[0.01, 0.1, 1.0])
    parser.add_argument("--in", dest="folder", type=Path, help=argparse.SUPPRESS)
    words = parser.parse_args()
    if words.folder is not None:
        decompose(words.folder, words.objects)
        return
    folder = Path(tempfile.mkdtemp(prefix="series_memory_"))
    out = sys.stdout
    try:
        calibration = MADE["made_up_calibration"]((words.rows, words.columns))
        write_calibration(calibration, folder / "calibration.h5")
        short = MADE["made_up_series"](calibration, DRAWN)
        scan = long_series(short, words.objects)
        write_scan(scan, folder / "scan.h5")
        counts = 4 * np.prod(scan.shape, dtype=np.int64) / 1e9
        stored = (folder / "scan.h5").stat().st_size / 1e9
        out.write(
            f"{scan.shape} counts: {counts:.2f} GB, in the file {stored:.2f} GB\n"
        )
        for share in words.shares:
            found = alone(folder, max(round(share * words.objects), 1))
            out.write("  ".join(f"{k} {v:.4g}" for k, v in found.items()) + "\n")
            out.flush()
    finally:
        shutil.rmtree(folder)


if __name__ == "__main__":
    main()
