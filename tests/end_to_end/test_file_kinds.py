"""A file of another kind where a scan is wanted: the sentence says what it is."""

from __future__ import annotations

from importlib.metadata import entry_points
from pathlib import Path
from typing import TYPE_CHECKING

import click
import pytest
from click.testing import CliRunner

from spectral.calibration.calibration_file import write_calibration
from spectral.scans.maps_file import write_maps
from tests.unit.test_report_maps import make_maps

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration

pytestmark = pytest.mark.end_to_end

DESCRIPTIONS = Path(__file__).resolve().parents[2] / "calibrations"


def said(*words: object) -> str:
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    group = script.load()
    assert isinstance(group, click.Group)
    done = CliRunner().invoke(group, list(map(str, words)))
    assert done.exit_code == 1
    return " ".join(done.stderr.split())


@pytest.fixture
def folder(make_calibration: Callable[..., Calibration], tmp_path: Path) -> Path:
    write_calibration(make_calibration((6, 8)), tmp_path / "calibration.h5")
    write_maps(make_maps(), tmp_path / "maps.h5")
    (tmp_path / "notes.txt").write_text("thirty exposures\n")
    (tmp_path / "half.h5").write_bytes((tmp_path / "maps.h5").read_bytes()[:3000])
    return tmp_path


@pytest.mark.parametrize("name", ["check", "calibrate", "simulate"])
def test_maps_or_a_calibration_in_place_of_a_scan(folder: Path, name: str) -> None:
    output = [] if name == "check" else ["-o", folder / "out.h5"]
    if name != "simulate":  # takes scripts only
        assert "it holds maps" in said(name, folder / "maps.h5", *output)
        assert "it holds a calibration" in said(
            name, folder / "calibration.h5", *output
        )
    wedge, detector = "wedge_pmma_steel.toml", "detector_cdte.toml"
    assert "it describes a wedge" in said(name, DESCRIPTIONS / wedge, *output)
    assert "it describes a detector" in said(name, DESCRIPTIONS / detector, *output)


def test_a_file_that_is_nothing_of_the_kind(folder: Path) -> None:
    assert "whose name ends with .toml" in said("check", folder / "notes.txt")
    # and no more than is known of one that is spoilt
    assert said("check", folder / "half.h5").endswith(
        "the file is truncated; copy it again from where it was made"
    )
