"""Time and peak memory of calibrations against pixels, exposures and thresholds.

A small wedge scan of the virtual CdTe detector is made once; larger ones repeat its
pixels with fresh counting noise, smaller ones leave out wedge steps or thresholds.
Each calibration runs in a process of its own:

    python -m tests.benchmarks.calibration_time [--largest 256]
"""

from __future__ import annotations

import argparse
import json
import resource
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.scans.scan import CountsInMemory
from spectral.scans.scan_file import read_scan, write_scan
from tests.benchmarks.other_detectors import CASES, instrument

if TYPE_CHECKING:
    from spectral.scans.scan import Scan

SMALL = 32
EXPOSURES, THRESHOLDS = 30, 5


def resized(scan: Scan, *, side: int, exposures: int, thresholds: int) -> Scan:
    """Scan with another number of pixels, exposures and thresholds."""
    steps = scan.exposures("wedge")
    others = np.setdiff1d(np.arange(scan.shape[0]), steps)
    wanted = min(max(exposures - others.size, 1), steps.size)
    taken = steps[np.linspace(0, steps.size - 1, wanted).round().astype(int)]
    keep = np.sort(np.concatenate([others, taken]))
    rungs = np.linspace(0, scan.shape[1] - 1, thresholds).round().astype(int)
    rng = np.random.default_rng(1)
    place = rng.integers(0, scan.shape[2] * scan.shape[3], side * side)
    grown = np.empty((keep.size, thresholds, side, side), np.uint32)
    for row, exposure in enumerate(keep):
        above = scan.counts.read([int(exposure)])[0][rungs].astype(np.float64)
        bins = -np.diff(above, axis=0, append=0.0).reshape(thresholds, -1)[:, place]
        noisy = rng.poisson(np.maximum(bins, 0.0))
        grown[row] = noisy[::-1].cumsum(axis=0)[::-1].reshape(-1, side, side)
    assert scan.current_ma is not None
    return replace(
        scan,
        counts=CountsInMemory(grown),
        thresholds_kev=scan.thresholds_kev[rungs],
        role=tuple(scan.role[i] for i in keep),
        thickness_mm=scan.thickness_mm[keep],
        count_time_s=scan.count_time_s[keep],
        current_ma=scan.current_ma[keep],
        pixel_mask=np.zeros((side, side), np.uint32),
    )


def calibrate(path: Path) -> None:
    """Calibrate a scan and print what that took (runs alone)."""
    scan = read_scan(path)
    wall, cpu = time.perf_counter(), time.process_time()
    WedgeCalibrator().fit(scan)
    result = {
        "wall_s": time.perf_counter() - wall,
        "cpu_s": time.process_time() - cpu,
        "peak_gib": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20,
    }
    sys.stdout.write(json.dumps(result))


def alone(path: Path) -> dict[str, float]:
    """`calibrate` in a process of its own: the peak is that of this run."""
    words = [
        sys.executable,
        "-m",
        "tests.benchmarks.calibration_time",
        "--in",
        str(path),
    ]
    done = subprocess.run(words, check=True, capture_output=True, text=True)
    found: dict[str, float] = json.loads(done.stdout)
    return found


def main() -> None:
    """Make a scan, calibrate it at many sizes, print a table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--largest", type=int, default=256, help="pixels along a side")
    parser.add_argument("--in", dest="scan", type=Path, help=argparse.SUPPRESS)
    words = parser.parse_args()
    if words.scan is not None:
        calibrate(words.scan)
        return
    case = next(c for c in CASES if c.detector == "cdte")
    small = instrument(case, pixels=SMALL).wedge_scan().scan
    sides = [s for s in (32, 64, 128, 256) if s <= words.largest]
    sizes = [(side, EXPOSURES, THRESHOLDS) for side in sides]
    sizes += [(64, n, THRESHOLDS) for n in (15, 20)]
    sizes += [(64, EXPOSURES, k) for k in (2, 3)]
    out = sys.stdout
    out.write("   pixels exposures thresholds   wall s    CPU s  peak GiB\n")
    with tempfile.TemporaryDirectory(prefix="calibration_time_") as folder:
        path = Path(folder) / "wedge.h5"
        for place, (side, exposures, thresholds) in enumerate(sizes):
            scan = resized(small, side=side, exposures=exposures, thresholds=thresholds)
            path.unlink(missing_ok=True)
            write_scan(scan, path)
            if place == 0:
                alone(path)  # compiles what is not in the cache
            found = alone(path)
            out.write(
                f"{side:5d}^2{scan.shape[0]:11d}{thresholds:11d}{found['wall_s']:9.1f}"
                f"{found['cpu_s']:9.1f}{found['peak_gib']:10.2f}\n"
            )
            out.flush()


if __name__ == "__main__":
    main()
