"""Blocks of a series on the workers of a running Dask cluster."""

from __future__ import annotations

from functools import lru_cache
from importlib import import_module
from typing import TYPE_CHECKING, Any

from spectral.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

    from spectral.decomposition.decomposer import MaterialDecomposer
    from spectral.decomposition.maps import Maps
    from spectral.scans.scan import Scan

IN_FLIGHT_PER_WORKER = 2
TRIES = 10
"""Times that a block is given to another worker when one dies with it."""


def on_cluster(
    address: str,
    calibration_path: Path,
    scan_path: Path,
    options: dict[str, bool],
) -> Callable[[list[list[int]]], Iterator[tuple[int, Maps]]]:
    """A way to compute blocks for `spectral.decomposition.series.decompose_series`.

    Parameters
    ----------
    address : str
        Of the scheduler, as "tcp://host:8786".
    calibration_path, scan_path : Path
        Both must be readable by every worker under these names.
    options : dict of str to bool
        Keyword arguments of `MaterialDecomposer`.

    Raises
    ------
    InputError
        If dask.distributed is not installed, or no scheduler answers.

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
    paths = (str(calibration_path.resolve()), str(scan_path.resolve()))

    def run(blocks: list[list[int]]) -> Iterator[tuple[int, Maps]]:
        try:
            client = distributed.Client(address, timeout="20s")
        except OSError as error:
            msg = f"no scheduler answers at {address} ({error})"
            raise InputError(msg) from error
        with client:
            yield from _stream(
                client,
                distributed.as_completed(),
                blocks,
                paths,
                tuple(sorted(options.items())),
            )

    return run


def _stream(
    client: Any,
    queue: Any,
    blocks: list[list[int]],
    paths: tuple[str, str],
    options: tuple[tuple[str, bool], ...],
) -> Iterator[tuple[int, Maps]]:
    def submit(place: int) -> Any:
        return client.submit(
            block_maps, *paths, options, blocks[place], pure=False, retries=TRIES
        )

    waiting = iter(range(len(blocks)))
    place_of: dict[str, int] = {}

    def feed() -> None:
        place = next(waiting, None)
        if place is not None:
            future = submit(place)
            place_of[future.key] = place
            queue.add(future)

    workers = max(len(client.scheduler_info()["workers"]), 1)
    for _ in range(IN_FLIGHT_PER_WORKER * workers):
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
    exposures: list[int],
) -> Maps:
    """Maps of some exposures, on a worker that keeps the decomposer for the next."""
    decomposer, scan = _worker_state(calibration_path, scan_path, options)
    return decomposer.block(scan, exposures)


@lru_cache(maxsize=2)
def _worker_state(
    calibration_path: str, scan_path: str, options: tuple[tuple[str, bool], ...]
) -> tuple[MaterialDecomposer, Scan]:
    from spectral.calibration.calibration_file import (  # noqa: PLC0415 - workers only
        read_calibration,
    )
    from spectral.decomposition.decomposer import (  # noqa: PLC0415 - workers only
        MaterialDecomposer,
    )
    from spectral.scans.script import open_scan  # noqa: PLC0415 - workers only

    scan = open_scan(scan_path)
    decomposer = MaterialDecomposer(
        read_calibration(calibration_path), threads=1, **dict(options)
    )
    return decomposer.fit(scan), scan
