"""What may lie where unfinished maps are kept."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

from spectral.errors import ScanError
from spectral.scans.maps_parts import MapsParts

if TYPE_CHECKING:
    from pathlib import Path


def test_damaged_record_of_a_job_is_one_sentence(tmp_path: Path) -> None:
    parts = MapsParts(tmp_path / "maps.h5", {"scan": "one"})
    with parts.held():
        pass
    parts.folder.mkdir(exist_ok=True)
    (parts.folder / "job.json").write_text("{")
    with pytest.raises(ScanError, match="damaged; delete"), parts.held():
        pass


def test_a_run_that_ends_before_its_first_block_leaves_no_folder(
    tmp_path: Path,
) -> None:
    parts = MapsParts(tmp_path / "maps.h5", {"scan": "one"})

    def run(*, first_block: bool) -> None:
        with parts.held():
            assert parts.folder.is_dir()
            if first_block:
                (parts.folder / "block_000000.npz").write_bytes(b"")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run(first_block=False)
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(KeyboardInterrupt):
        run(first_block=True)
    assert parts.has(0)


def test_file_in_the_way_is_one_sentence(tmp_path: Path) -> None:
    parts = MapsParts(tmp_path / "maps.h5", {"scan": "one"})
    if parts.folder.exists():
        parts.folder.rmdir()
    parts.folder.write_text("mine")
    with pytest.raises(ScanError, match="in the way"), parts.held():
        pass
    assert parts.folder.read_text() == "mine"
