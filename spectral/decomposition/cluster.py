"""Blocks of a series on the workers of a running Dask cluster."""

from __future__ import annotations

from functools import lru_cache
from importlib import import_module
from threading import Lock
from typing import TYPE_CHECKING, Any

from spectral.errors import InputError, ScanError

if TYPE_CHECKING:
    from collections.abc import Generator, Iterator
    from pathlib import Path

    from spectral.decomposition.decomposer import MaterialDecomposer
    from spectral.decomposition.series import Compute
    from spectral.scans.maps import Maps
    from spectral.scans.scan import Scan

IN_FLIGHT_PER_WORKER = 2
ANSWER = "20s"
"""How long to wait for the scheduler's answer."""
TRIES = 2
"""Times that a block is tried again when reading its counts fails."""
_ONE_BLOCK_AT_A_TIME = Lock()


def on_cluster(
    address: str,
    calibration_path: Path,
    scan_path: Path,
    options: dict[str, bool],
    *,
    digests: tuple[str, str],
) -> Compute:
    """A way to compute blocks for `spectral.decomposition.series.decompose_series`.

    Parameters
    ----------
    address : str
        Of the scheduler, as "tcp://host:8786".
    calibration_path, scan_path : Path
        Both must be readable by every worker under these names.
    options : dict of str to bool
        Keyword arguments of `MaterialDecomposer`.
    digests : (str, str)
        Of calibration and scan: workers must read the same.

    Raises
    ------
    InputError
        If dask.distributed is not installed, or no scheduler answers.
    ScanError
        From the run: if the scheduler is lost, or one block ends worker after worker.

    Notes
    -----
    No more than a few blocks a worker are in flight, so neither scheduler nor this
    process fills with results. Workers may come, go and die: their blocks are given
    to others.
    """
    try:
        distributed: Any = import_module("distributed")
    except ImportError as error:
        msg = (
            "a scheduler was named but dask.distributed is not installed; install the "
            "extra: pip install 'wedgewright[cluster]'"
        )
        raise InputError(msg) from error
    job = (
        str(calibration_path.resolve()),
        str(scan_path.resolve()),
        tuple(sorted(options.items())),
        digests,
    )

    def client() -> Any:
        try:
            return distributed.Client(address, timeout=ANSWER)
        except (OSError, ValueError) as error:
            msg = (
                f"no scheduler answers at {address} ({error}); start one, correct the "
                "address, or leave it out to work here"
            )
            raise InputError(msg) from error

    with client():
        pass  # answers: anything else is better known before the work

    def run(blocks: list[list[int]]) -> Generator[tuple[int, Maps]]:
        if not blocks:
            return
        with client() as connected:
            try:
                yield from _stream(connected, distributed.as_completed(), blocks, job)
            except distributed.KilledWorker as error:
                msg = (
                    f"several workers of {address} died with the same block, perhaps "
                    "for want of memory; finished blocks are kept: give the workers "
                    "more, then the same command goes on"
                )
                raise ScanError(msg) from error
            except (
                distributed.CancelledError,
                distributed.comm.CommClosedError,
            ) as error:
                msg = (
                    f"the scheduler at {address} is gone; finished blocks are kept: "
                    "start it again, then the same command goes on"
                )
                raise ScanError(msg) from error

    return run


def _stream(
    client: Any, queue: Any, blocks: list[list[int]], job: tuple[Any, ...]
) -> Iterator[tuple[int, Maps]]:
    waiting = iter(range(len(blocks)))
    place_of: dict[str, int] = {}

    def feed() -> None:
        wanted = IN_FLIGHT_PER_WORKER * max(len(client.nthreads()), 1)
        while len(place_of) < wanted:
            place = next(waiting, None)
            if place is None:
                return
            future = client.submit(
                block_maps, *job, blocks[place], pure=False, retries=TRIES
            )
            place_of[future.key] = place
            queue.add(future)

    feed()
    for future in queue:
        maps = future.result()
        place = place_of.pop(future.key)
        future.release()
        feed()
        yield place, maps


def block_maps(
    calibration_path: str,
    scan_path: str,
    options: tuple[tuple[str, bool], ...],
    digests: tuple[str, str],
    exposures: list[int],
) -> Maps:
    """Maps of some exposures, on a worker that keeps the decomposer for the next.

    A worker of several threads reads blocks side by side and solves one of them at a
    time, with all its threads.

    Raises
    ------
    ScanError
        If this worker finds other files under those names.
    """
    with _ONE_BLOCK_AT_A_TIME:
        decomposer, scan = _worker_state(calibration_path, scan_path, options, digests)
    counts = scan.counts.read(exposures)
    with _ONE_BLOCK_AT_A_TIME:
        return decomposer.maps_of(counts, exposures, scan.count_limit)


@lru_cache(maxsize=1)
def _worker_state(
    calibration_path: str,
    scan_path: str,
    options: tuple[tuple[str, bool], ...],
    digests: tuple[str, str],
) -> tuple[MaterialDecomposer, Scan]:
    from spectral.calibration.calibration_file import (  # noqa: PLC0415 - workers only
        read_calibration,
    )
    from spectral.decomposition.decomposer import (  # noqa: PLC0415 - workers only
        MaterialDecomposer,
    )
    from spectral.scans.script import open_scan  # noqa: PLC0415 - workers only

    scan = open_scan(scan_path)
    calibration = read_calibration(calibration_path)
    if (calibration.digest, scan.digest) != digests:
        msg = (
            f"a worker reads other files as {calibration_path} and {scan_path}; all "
            "workers need the same files under the same names"
        )
        raise ScanError(msg)
    decomposer = MaterialDecomposer(
        calibration, threads=_own_threads(), **dict(options)
    )
    return decomposer.fit(scan), scan


def _own_threads() -> int:
    """Threads of the worker that this runs on."""
    distributed: Any = import_module("distributed")
    try:
        return int(distributed.get_worker().state.nthreads)
    except ValueError:
        return 1
