"""A series in files, and the maps that an undisturbed run makes of it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.decomposition import series
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.series import decompose_series
from spectral.scans.scan_file import file_digest, read_scan, write_scan

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

OBJECTS = 9
BLOCK = 2
EPOCH = "1700000000"


@pytest.fixture(scope="module")
def folder(
    make_calibration: Callable[..., Calibration],
    make_series: Callable[..., Scan],
    tmp_path_factory: pytest.TempPathFactory,
    request: pytest.FixtureRequest,
) -> Path:
    """A calibration and a series of it, as long as the module says, in files."""
    folder = tmp_path_factory.mktemp("series")
    calibration = make_calibration()
    write_calibration(calibration, folder / "calibration.h5")
    objects = getattr(request.module, "OBJECTS", OBJECTS)
    write_scan(make_series(calibration, objects), folder / "scan.h5")
    return folder


@pytest.fixture
def small_blocks(monkeypatch: pytest.MonkeyPatch) -> None:
    """Two exposures a block, and one date for all files."""
    monkeypatch.setattr(series, "MOST_EXPOSURES", BLOCK)
    monkeypatch.setenv("SOURCE_DATE_EPOCH", EPOCH)


@pytest.fixture(scope="module")
def scan(folder: Path) -> Scan:
    return read_scan(folder / "scan.h5")


class FittedOnce(MaterialDecomposer):
    """Spares the tests reading the same open exposures again for each run."""

    def fit(self, scan: Scan) -> MaterialDecomposer:
        return self if hasattr(self, "session_") else super().fit(scan)


@pytest.fixture(scope="module")
def decomposer(folder: Path) -> MaterialDecomposer:
    return FittedOnce(read_calibration(folder / "calibration.h5"))


@pytest.fixture(scope="module")
def undisturbed(
    decomposer: MaterialDecomposer, scan: Scan, folder: Path
) -> Iterator[str]:
    """Digest of the file that nothing interrupted."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(series, "MOST_EXPOSURES", BLOCK)
        patch.setenv("SOURCE_DATE_EPOCH", EPOCH)
        decompose_series(decomposer, scan, folder / "undisturbed.h5")
        yield file_digest(folder / "undisturbed.h5")
