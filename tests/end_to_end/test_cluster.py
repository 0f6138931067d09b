"""Blocks on the workers of a cluster: the same maps, whatever becomes of the workers."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from types import SimpleNamespace
from typing import TYPE_CHECKING, Any, Self

import pytest

from spectral.calibration.calibration_file import read_calibration
from spectral.decomposition import cluster, series
from spectral.decomposition.cluster import on_cluster
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.series import decompose_series
from spectral.errors import InputError, ScanError
from spectral.scans.scan_file import file_digest

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from spectral.scans.scan import Scan

pytestmark = pytest.mark.end_to_end

OBJECTS = 12
OPTIONS = {"bias_correction": True, "nonnegative": False, "follow_pixels": True}


@pytest.fixture(scope="module")
def decomposer(folder: Path) -> MaterialDecomposer:
    return MaterialDecomposer(read_calibration(folder / "calibration.h5"))


@pytest.fixture(autouse=True)
def _small_blocks(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(series, "MOST_EXPOSURES", 1)
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1700000000")


@pytest.fixture
def scheduler(tmp_path: Path) -> Iterator[str]:
    """Address of a scheduler with two workers of one thread, each its own process."""
    pytest.importorskip("distributed")
    began: list[subprocess.Popen[bytes]] = []

    def begin(what: str, *words: str) -> None:
        module = f"distributed.cli.dask_{what}"
        began.append(
            subprocess.Popen(
                [sys.executable, "-m", module, "--host", "127.0.0.1", *words],
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
            )
        )

    told = tmp_path / "scheduler.json"
    try:
        begin(
            "scheduler", "--port", "0", "--no-dashboard", "--scheduler-file", str(told)
        )
        until = time.monotonic() + 60.0
        while not told.exists() or not told.read_text().endswith("}"):
            assert began[0].poll() is None
            assert time.monotonic() < until
            time.sleep(0.05)
        address = str(json.loads(told.read_text())["address"])
        for _ in range(2):
            begin("worker", address, "--nthreads", "1", "--no-nanny", "--no-dashboard")
        yield address
    finally:
        for child in reversed(began):
            child.kill()
            child.wait()


def compute(folder: Path, scan: Scan, address: str) -> Any:
    """Blocks of the series on the cluster's workers."""
    paths = folder / "calibration.h5", folder / "scan.h5"
    digests = (read_calibration(paths[0]).digest, scan.digest)
    return on_cluster(address, *paths, OPTIONS, digests=digests)


@pytest.mark.slow
def test_worker_killed_at_work_costs_nothing(
    scheduler: str,
    decomposer: MaterialDecomposer,
    folder: Path,
    scan: Scan,
    tmp_path: Path,
) -> None:
    distributed = pytest.importorskip("distributed")
    decompose_series(decomposer, scan, tmp_path / "here.h5")
    killed: list[int] = []
    with distributed.Client(scheduler) as client:
        client.wait_for_workers(2, timeout=60)

    def kill_one(share: float) -> None:
        if share > 0.2 and not killed:
            with distributed.Client(scheduler) as client:
                workers = client.run(os.getpid)
            assert len(workers) == 2
            killed.append(min(workers.values()))
            os.kill(killed[0], signal.SIGKILL)

    run = decompose_series(
        decomposer,
        scan,
        tmp_path / "there.h5",
        compute=compute(folder, scan, scheduler),
        progress=kill_one,
    )
    assert killed
    assert run.blocks == OBJECTS
    assert file_digest(tmp_path / "there.h5") == file_digest(tmp_path / "here.h5")


def test_worker_refuses_other_files(
    folder: Path, scan: Scan, decomposer: MaterialDecomposer
) -> None:
    pytest.importorskip("distributed")
    paths = str(folder / "calibration.h5"), str(folder / "scan.h5")
    options = tuple(sorted(OPTIONS.items()))
    digests = (decomposer.calibration.digest, scan.digest)
    maps = cluster.block_maps(*paths, options, digests, [4, 5])
    assert maps.exposure.tolist() == [4, 5]
    with pytest.raises(ScanError, match=r"a worker reads other files as .*scan.h5"):
        cluster.block_maps(*paths, options, (digests[0], "0" * 64), [4, 5])


def test_missing_library_is_named(
    folder: Path, scan: Scan, monkeypatch: pytest.MonkeyPatch
) -> None:
    def absent(name: str) -> None:
        raise ImportError(name)

    monkeypatch.setattr(cluster, "import_module", absent)
    with pytest.raises(InputError, match=r"pip install 'wedgewright\[cluster\]'"):
        compute(folder, scan, "tcp://127.0.0.1:9")


def test_scheduler_that_does_not_answer(
    folder: Path, scan: Scan, monkeypatch: pytest.MonkeyPatch
) -> None:
    pytest.importorskip("distributed")
    monkeypatch.setattr(cluster, "ANSWER", "1s")
    with pytest.raises(InputError, match=r"no scheduler answers at tcp://127.0.0.1:9"):
        compute(folder, scan, "tcp://127.0.0.1:9")


@pytest.mark.parametrize(
    ("name", "sentence"),
    [
        ("KilledWorker", "several workers of tcp://127.0.0.1:9 died with the same"),
        ("CancelledError", "the scheduler at tcp://127.0.0.1:9 is gone; finished"),
        ("CommClosedError", "the scheduler at tcp://127.0.0.1:9 is gone; finished"),
    ],
)
def test_end_of_the_cluster_is_one_sentence(
    name: str,
    sentence: str,
    decomposer: MaterialDecomposer,
    folder: Path,
    scan: Scan,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    kinds = {
        kind: type(kind, (Exception,), {})
        for kind in ("KilledWorker", "CancelledError", "CommClosedError")
    }

    class Client:
        def __init__(self, *_: Any, **__: Any) -> None: ...

        def __enter__(self) -> Self:
            return self

        def __exit__(self, *_: object) -> None: ...

        def nthreads(self) -> dict[str, int]:
            raise kinds[name]

    made = SimpleNamespace(
        Client=Client,
        as_completed=list,
        KilledWorker=kinds["KilledWorker"],
        CancelledError=kinds["CancelledError"],
        comm=SimpleNamespace(CommClosedError=kinds["CommClosedError"]),
    )
    monkeypatch.setattr(cluster, "import_module", lambda _: made)
    run = compute(folder, scan, "tcp://127.0.0.1:9")
    with pytest.raises(ScanError, match=sentence):
        decompose_series(decomposer, scan, tmp_path / "m.h5", compute=run)
    monkeypatch.undo()
    monkeypatch.setattr(series, "MOST_EXPOSURES", 1)
    assert decompose_series(decomposer, scan, tmp_path / "m.h5").exposures == OBJECTS
