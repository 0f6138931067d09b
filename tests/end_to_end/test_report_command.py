"""The command wedgewright report, as a user calls it."""

from __future__ import annotations

import json
from importlib.metadata import entry_points
from typing import TYPE_CHECKING

import click
import numpy as np
import pytest
from click.testing import CliRunner

from spectral.scans.maps import Maps
from spectral.scans.maps_file import write_maps
from spectral.scans.scan_file import write_scan

if TYPE_CHECKING:
    from pathlib import Path

    from click.testing import Result

    from tests.conftest import MakeScan

pytestmark = pytest.mark.end_to_end


@pytest.fixture
def maps_path(tmp_path: Path) -> Path:
    rng = np.random.default_rng(3)
    shape = (2, 1, 12, 10)
    single = np.float32
    path = tmp_path / "maps.h5"
    write_maps(
        Maps(
            material=("PE",),
            exposure=np.array([3, 4], np.int32),
            areal_density=rng.normal(2.0, 0.05, shape).astype(single),
            areal_density_errors=np.full(shape, 0.05, single),
            covariance=np.full(shape, 0.0025, single),
            calibration_errors=np.full(shape, 0.01, single),
            deviance=np.ones((2, 12, 10), single),
            flags=np.zeros((2, 12, 10), np.uint16),
            process={"bins": "4"},
        ),
        path,
    )
    return path


def run(*words: object) -> Result:
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    command = script.load()
    assert isinstance(command, click.Group)
    return CliRunner().invoke(command, ["report", *map(str, words)])


def test_a_page_about_maps(maps_path: Path, tmp_path: Path) -> None:
    page = tmp_path / "page.html"
    result = run(maps_path, "-o", page)
    assert result.exit_code == 0, result.output
    assert f"page: {page}" in result.stdout
    assert "PE in maps.h5" in result.stdout
    text = page.read_text(encoding="utf-8")
    assert text.startswith("<!DOCTYPE html>")
    assert "://" not in text


def test_figures_for_machines(maps_path: Path, tmp_path: Path) -> None:
    page = tmp_path / "page.html"
    result = run(maps_path, "-o", page, "--exposure", 4, "--row", 2, "--json")
    assert result.exit_code == 0, result.output
    found = json.loads(result.stdout)
    assert found["page"] == str(page)
    assert found["title"] == "PE in exposure 4 of maps.h5"
    assert found["figures"]["PE, median pixel"] == pytest.approx(2.0, abs=0.05)
    assert found["figures"]["pixels without a flag"] == 1.0
    assert "row 2" in page.read_text(encoding="utf-8")


def test_a_page_about_a_scan(make_scan: MakeScan, tmp_path: Path) -> None:
    scan = tmp_path / "scan.h5"
    write_scan(make_scan(pixels=(8, 10)), scan)
    page = tmp_path / "page.html"
    result = run(scan, "-o", page)
    assert result.exit_code == 0, result.output
    assert "The scan is fit for use" in result.stdout
    assert page.is_file()


def test_wrong_use_and_wrong_data(maps_path: Path, tmp_path: Path) -> None:
    page = tmp_path / "page.html"
    wrong = run(maps_path, "-o", page, "--exposure", 7)
    assert wrong.exit_code == 2
    assert "exposure 7 is not among the maps' exposures (3 to 4)" in wrong.stderr
    other = tmp_path / "other.h5"
    other.write_text("words")
    broken = run(other, "-o", page)
    assert broken.exit_code == 1
    assert "this is not an HDF5 file" in broken.stderr
    assert not page.exists()
    nowhere = run(maps_path, "-o", tmp_path / "nowhere" / "page.html")
    assert nowhere.exit_code in {1, 2}
    assert len(nowhere.stderr.strip().splitlines()) <= 4


def test_help_says_what_the_page_is_not() -> None:
    result = run("--help")
    assert result.exit_code == 0
    assert "radiation-protection" in " ".join(result.stdout.split())
