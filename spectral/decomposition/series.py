"""A long series decomposed block by block, interruptible at any moment."""

from __future__ import annotations

import hashlib
import json
import os
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import closing
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import spectral
from spectral.decomposition.object_scan import chosen_exposures
from spectral.scans.maps_parts import MapsParts, exposures_at_once

if TYPE_CHECKING:
    from collections.abc import Callable, Generator, Iterable, Iterator, Sequence

    import numpy as np
    from numpy.typing import NDArray

    from spectral.decomposition.decomposer import MaterialDecomposer
    from spectral.scans.maps import Maps
    from spectral.scans.scan import Scan

    Compute = Callable[[list[list[int]]], Generator[tuple[int, Maps]]]

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
    compute: Compute | None = None,
    progress: Callable[[float], None] | None = None,
    gathering: Callable[[float], None] | None = None,
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
        Called with the finished share, first with what an earlier run had left.
    gathering : callable, optional
        Called with the share that is in the maps file, once all blocks are there.

    Raises
    ------
    ScanError
        If scan and calibration do not match, another run writes this output,
        unfinished maps of another job lie there, or the disk takes no more.

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
    run = compute if compute is not None else _here(decomposer, scan)
    tell = progress if progress is not None else _silent
    with MapsParts(path, _job(decomposer, scan, record, blocks)).held() as parts:
        missing = [i for i in range(len(blocks)) if not parts.has(i)]
        resumed = len(blocks) - len(missing)
        tell(resumed / len(blocks))
        _work(
            parts,
            missing,
            run([blocks[i] for i in missing]),
            lambda done: tell((resumed + done) / len(blocks)),
        )
        material = [m.name for m in decomposer.calibration_.materials]
        process = {**record, "date": _date()}
        parts.finish(material, len(blocks), process, tell=gathering or _silent)
    return SeriesRun(
        path=path, exposures=chosen.size, blocks=len(blocks), resumed=resumed
    )


def _work(
    parts: MapsParts,
    missing: list[int],
    results: Generator[tuple[int, Maps]],
    tell: Callable[[int], None],
) -> None:
    """Store blocks as they come, each while the next one is being computed."""
    written: Future[None] | None = None
    with ThreadPoolExecutor(1) as writer, closing(results):
        for done, (place, maps) in enumerate(results, start=1):
            if written is not None:
                written.result()
            written = writer.submit(parts.put, missing[place], maps)
            tell(done)
        if written is not None:
            written.result()


def _job(
    decomposer: MaterialDecomposer,
    scan: Scan,
    record: dict[str, str],
    blocks: list[list[int]],
) -> dict[str, str]:
    """What blocks depend on, each under the word by which people know it."""
    calibration = decomposer.calibration
    return {
        "options": record["options"],
        "calibration": calibration.digest
        or _sha256([calibration.departures.tobytes()]),
        "scan": scan.digest or _sha256(_counts_of(scan)),
        "exposures": _sha256([json.dumps(blocks).encode()]),
        "version": spectral.__version__,
    }


def _counts_of(scan: Scan) -> Iterator[bytes]:
    """Counts of a scan that was never stored, exposure by exposure."""
    for exposure in range(scan.shape[0]):
        yield scan.counts.read([exposure]).tobytes()


def _sha256(parts: Iterable[bytes]) -> str:
    whole = hashlib.sha256()
    for part in parts:
        whole.update(part)
    return whole.hexdigest()


def _silent(_: float) -> None:
    pass


def split(scan: Scan, chosen: NDArray[np.int64], materials: int) -> list[list[int]]:
    """Exposures in blocks of a size that depends on the scan's shape alone."""
    _, thresholds, rows, columns = scan.shape
    maps = 4 * (3 * materials + materials * (materials + 1) // 2 + 1) + 2
    each = rows * columns * (4 * thresholds + maps)
    size = exposures_at_once(min(BLOCK_BYTES // each, MOST_EXPOSURES))
    return [
        [int(e) for e in chosen[first : first + size]]
        for first in range(0, chosen.size, size)
    ]


def _here(decomposer: MaterialDecomposer, scan: Scan) -> Compute:
    """Blocks in order, the next one's counts being read meanwhile."""

    def run(blocks: list[list[int]]) -> Generator[tuple[int, Maps]]:
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
