"""The examples run, and answer the questions they ask, at a quarter of their size."""

from __future__ import annotations

import csv
import os
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest

from spectral.scans.script import read_script

EXAMPLES = Path(__file__).resolve().parents[2] / "examples"
PNG = b"\x89PNG\r\n\x1a\n"

pytestmark = [pytest.mark.end_to_end, pytest.mark.slow]


def ran(words: list[str], folder: Path) -> str:
    """What a command of an example printed; its folder may be anywhere."""
    # the interpreter's own folder holds the commands that the shell is to find
    path = os.pathsep.join([str(Path(sys.executable).parent), os.environ["PATH"]])
    done = subprocess.run(
        words, cwd=folder, env={**os.environ, "PATH": path},
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr[-2000:]
    assert "Warning" not in done.stderr
    return done.stdout


def quick(name: str, pixels: tuple[int, int], folder: Path) -> str:
    script = str(EXAMPLES / name / "run.py")
    size = ["--pixels", str(pixels[0]), str(pixels[1])]
    return ran([sys.executable, script, "--out", str(folder), *size, "--quick"], folder)


def table(path: Path) -> dict[str, list[str]]:
    with path.open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    return {key: [row[key] for row in rows] for key in rows[0]}


def numbers(rows: dict[str, list[str]], key: str) -> np.ndarray:
    return np.array(rows[key], np.float64)


def test_metal_is_found_sized_and_named(tmp_path: Path) -> None:
    said = quick("metal_in_polymer", (12, 24), tmp_path)
    rows = table(tmp_path / "inclusions.csv")
    true, found = numbers(rows, "true_mm"), numbers(rows, "found_mm")
    error, steel = numbers(rows, "error_mm"), np.array(rows["metal"]) == "steel"
    # every steel piece, and aluminium well above its limit
    sure = steel | (true >= 0.5)
    assert np.all(np.array(rows["found"])[sure] == "True")
    np.testing.assert_allclose(found[steel], true[steel], rtol=0.12)
    assert np.all(np.abs(found - true) < 4.5 * error + 0.05 * true)
    named = np.array(rows["named"])
    assert np.all(named[steel & (true >= 0.2)] == "steel")
    assert "detection limit" in said
    assert (tmp_path / "inclusions.png").read_bytes().startswith(PNG)


def test_bone_is_measured_behind_soft_tissue(tmp_path: Path) -> None:
    said = quick("bone_and_soft_tissue", (12, 20), tmp_path)
    rows = table(tmp_path / "bone.csv")
    assert len(rows["bone_mm"]) == 25
    away = numbers(rows, "found_mm") - numbers(rows, "bone_mm")
    pull = away / numbers(rows, "error_mm")
    assert np.abs(pull).max() < 5.0
    assert np.sqrt(np.mean(pull**2)) < 2.0
    # thicker tissue, larger error
    tissue, single = numbers(rows, "tissue_mm"), numbers(rows, "pixel_error_mm")
    assert single[tissue > 90].min() > 2.0 * single[tissue < 30].min()
    assert "no medical device" in said
    assert (tmp_path / "bone.png").read_bytes().startswith(PNG)


def test_iodine_is_straight_in_what_was_prepared(tmp_path: Path) -> None:
    said = quick("iodine_vials", (12, 18), tmp_path)
    rows = table(tmp_path / "iodine.csv")
    prepared, found = numbers(rows, "prepared"), numbers(rows, "found")
    np.testing.assert_allclose(prepared, [0, 2, 5, 10, 20, 35], atol=1e-9)
    pull = (found - prepared) / numbers(rows, "error")
    assert np.abs(pull).max() < 5.0
    slope = np.polyfit(prepared, found, 1)[0]
    assert slope == pytest.approx(1.0, abs=0.1)
    assert "chi-square" in said
    assert (tmp_path / "iodine.png").read_bytes().startswith(PNG)


def test_the_weekly_scan_finds_the_drift(tmp_path: Path) -> None:
    script = str(EXAMPLES / "weekly_wedge" / "run.sh")
    ran(["bash", script, str(tmp_path), "8", "12"], tmp_path)
    assert (tmp_path / "drift.png").read_bytes().startswith(PNG)
    assert (tmp_path / "changes.html").stat().st_size > 0
    assert "keV" in (tmp_path / "changes.txt").read_text(encoding="utf-8")
    for week in ("last_week", "this_week"):
        with h5py.File(tmp_path / f"{week}.truth.h5") as file:
            planted = file["entry/threshold_drift"][0]
        assert planted.max() == pytest.approx(0.0 if week == "last_week" else 0.85)


@pytest.mark.parametrize(
    "path", sorted(EXAMPLES.glob("*/*.toml")), ids=lambda p: f"{p.parent.name}-{p.stem}"
)
def test_each_script_says_that_it_is_invented(path: Path) -> None:
    assert "(invented)" in read_script(path).title
    assert "invented" in (path.parent / "README.md").read_text(encoding="utf-8")
