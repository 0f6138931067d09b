"""One worker and two on this machine: time of the same series, and the same file.

Run ``python tests/benchmarks/cluster_scaling.py``; see README.md beside it.
"""

from __future__ import annotations

import os

for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_variable] = "1"

import argparse
import runpy
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import distributed
import numpy as np

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.decomposition.cluster import on_cluster
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.series import decompose_series
from spectral.scans.scan_file import file_digest, read_scan, write_scan

MADE = runpy.run_path(str(Path(__file__).parents[1] / "conftest.py"))
OPTIONS = {"bias_correction": True, "nonnegative": False, "follow_pixels": True}


def timed(folder: Path, workers: int) -> dict[str, Any]:
    """A series on so many workers of one thread, each a process; they warm up first."""
    paths = folder / "calibration.h5", folder / "scan.h5"
    calibration, scan = read_calibration(paths[0]), read_scan(paths[1])
    decomposer = MaterialDecomposer(calibration)
    make: Any = distributed.LocalCluster  # it carries no types
    connect: Any = distributed.Client
    with make(
        n_workers=workers,
        threads_per_worker=1,
        processes=True,
        host="127.0.0.1",
        dashboard_address=None,
    ) as local:
        compute = on_cluster(
            local.scheduler_address, *paths, OPTIONS,
            digests=(calibration.digest, scan.digest),
        )  # fmt: skip
        objects = scan.exposures("object").tolist()
        list(compute([[e] for e in objects[: 4 * workers]]))
        marks: list[float] = []
        own: list[float] = []

        def mark(_: float) -> None:
            marks.append(time.monotonic())
            own.append(time.process_time())

        with connect(local) as client:
            before = sum(client.run(time.process_time).values())
            output = folder / f"maps_{workers}.h5"
            decompose_series(decomposer, scan, output, compute=compute, progress=mark)
            ended = time.monotonic()
            theirs = sum(client.run(time.process_time).values()) - before
        return {
            "workers": workers,
            "blocks_s": marks[-1] - marks[0],
            "file_s": ended - marks[-1],
            "cpu_of_workers_s": theirs,
            "cpu_here_s": own[-1] - own[0],
            "digest": file_digest(output)[:16],
        }


def main() -> None:
    """Make a series and time it with one worker and with two."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--side", type=int, default=256)
    parser.add_argument("--objects", type=int, default=240)
    words = parser.parse_args()
    os.environ["SOURCE_DATE_EPOCH"] = "1700000000"
    with tempfile.TemporaryDirectory(prefix="cluster_scaling_") as name:
        folder = Path(name)
        calibration = MADE["made_up_calibration"]((words.side, words.side))
        write_calibration(calibration, folder / "calibration.h5")
        write_scan(
            MADE["made_up_series"](calibration, words.objects), folder / "scan.h5"
        )
        found = []
        for workers in (1, 2):
            found.append(timed(folder, workers))
            line = "  ".join(
                f"{k} {v:.4g}" if isinstance(v, float) else f"{k} {v}"
                for k, v in found[-1].items()
            )
            sys.stdout.write(line + "\n")
            sys.stdout.flush()
    one, two = found
    sys.stdout.write(
        f"two workers are {one['blocks_s'] / two['blocks_s']:.2f} times as fast; load of "
        f"the machine {np.round(os.getloadavg()[0], 1)}; the same file: "
        f"{one['digest'] == two['digest']}\n"
    )


if __name__ == "__main__":
    main()
