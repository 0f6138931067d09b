"""A long series decomposed block by block, interruptible at any moment."""

from __future__ import annotations

import hashlib
import json
import os
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.decomposition.object_scan import chosen_exposures
from spectral.scans.maps_parts import MapsParts

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    from numpy.typing import NDArray

    from spectral.decomposition.decomposer import MaterialDecomposer
    from spectral.decomposition.maps import Maps
    from spectral.scans.scan import Scan

BLOCK_BYTES = 48 * 2**20
"""Size of a block's counts and maps together: three blocks are in memory at once."""
MOST_EXPOSURES = 64


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesRun:
    """What a run did.

    Attributes
    ----------
    path : Path
        The finished maps file.
    exposures, blocks, resumed : int
        Exposures in all, blocks in all, and blocks that an earlier run had left.
    """

    path: Path
    exposures: int
    blocks: int
    resumed: int


def decompose_series(
    decomposer: MaterialDecomposer,
    scan: Scan,
    path: str | Path,
    *,
    exposures: Sequence[int] | None = None,
    compute: Callable[[list[list[int]]], Iterator[tuple[int, Maps]]] | None = None,
    progress: Callable[[float], None] | None = None,
) -> SeriesRun:
    """Write the maps of a scan's object exposures to a file.

    Parameters
    ----------
    decomposer : MaterialDecomposer
    scan : Scan
    path : str or Path
        Appears when it is complete. Until then finished blocks lie beside it; the
        same call goes on from them.
    exposures : sequence of int, optional
        Others than those whose role is "object".
    compute : callable, optional
        Takes lists of exposures and yields (list's index, maps) in any order;
        in this process by default (`spectral.decomposition.cluster` has another).
    progress : callable, optional
        Called with the finished share.

    Raises
    ------
    ScanError
        If scan and calibration do not match, another run writes this output, or
        unfinished maps of another job lie there.

    Notes
    -----
    The result does not depend on blocks, threads or interruptions. The date in the
    record is the run's, or SOURCE_DATE_EPOCH's if that is set (reproducible-builds
    convention): then the whole file is the same bit by bit.
    """
    path = Path(path)
    decomposer.fit(scan)
    chosen = chosen_exposures(scan, exposures)
    blocks = split(scan, chosen, len(decomposer.calibration_.materials))
    record = decomposer.record(scan, chosen)
    job = {
        "record": hashlib.sha256(json.dumps(record).encode()).hexdigest(),
        "exposures": hashlib.sha256(chosen.tobytes()).hexdigest(),
        "blocks": len(blocks),
    }
    with MapsParts(path, job).held() as parts:
        missing = [i for i in range(len(blocks)) if not parts.has(i)]
        resumed = len(blocks) - len(missing)
        done = resumed
        wanted = [blocks[i] for i in missing]
        run = compute if compute is not None else _here(decomposer, scan)
        with ThreadPoolExecutor(1) as writer:
            written: Future[None] | None = None
            for place, maps in run(wanted):
                if written is not None:
                    written.result()
                written = writer.submit(parts.put, missing[place], maps)
                done += 1
                if progress is not None:
                    progress(done / len(blocks))
            if written is not None:
                written.result()
        material = [m.name for m in decomposer.calibration_.materials]
        parts.finish(material, len(blocks), {**record, "date": _date()})
    return SeriesRun(
        path=path, exposures=chosen.size, blocks=len(blocks), resumed=resumed
    )


def split(scan: Scan, chosen: NDArray[np.int64], materials: int) -> list[list[int]]:
    """Exposures in blocks of a size that depends on the scan's shape alone."""
    _, thresholds, rows, columns = scan.shape
    maps = 4 * (3 * materials + materials * (materials + 1) // 2 + 1) + 2
    each = rows * columns * (4 * thresholds + maps)
    size = int(np.clip(BLOCK_BYTES // each, 1, MOST_EXPOSURES))
    return [
        [int(e) for e in chosen[first : first + size]]
        for first in range(0, chosen.size, size)
    ]


def _here(
    decomposer: MaterialDecomposer, scan: Scan
) -> Callable[[list[list[int]]], Iterator[tuple[int, Maps]]]:
    """Blocks in order, the next one's counts being read meanwhile."""

    def run(blocks: list[list[int]]) -> Iterator[tuple[int, Maps]]:
        with ThreadPoolExecutor(1) as reader:
            ahead: Future[Any] | None = None
            for i, block in enumerate(blocks):
                counts = (
                    ahead.result() if ahead is not None else scan.counts.read(block)
                )
                if i + 1 < len(blocks):
                    ahead = reader.submit(scan.counts.read, blocks[i + 1])
                yield i, decomposer.maps_of(counts, block, scan.count_limit)

    return run


def _date() -> str:
    epoch = os.environ.get("SOURCE_DATE_EPOCH")
    now = (
        datetime.now(UTC) if epoch is None else datetime.fromtimestamp(int(epoch), UTC)
    )
    return now.isoformat(timespec="seconds")
