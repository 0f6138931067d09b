"""The installed command: what it prints where, and how it ends."""

from __future__ import annotations

import json
import subprocess
import sys
import warnings
from importlib.metadata import entry_points
from typing import TYPE_CHECKING, Any

import click
import numpy as np
import pytest
import tifffile
from click.testing import CliRunner

import spectral
from spectral.errors import CalibrationError, InputError, QualityWarning
from spectral.scans.scan_file import write_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.scans.scan import Scan

pytestmark = pytest.mark.end_to_end


def command() -> click.Group:
    """The command as it is installed."""
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    found = script.load()
    assert isinstance(found, click.Group)
    return found


def outcome() -> Any:
    """The module of shared endings, which the command itself uses."""
    return sys.modules[f"{type(command()).__module__.rpartition('.')[0]}.outcome"]


def ends_well(function: Callable[[], None]) -> Callable[[], None]:
    """The command's own ending, around a function of a test."""
    wrapped: Callable[[], None] = outcome().ends_well(function)
    return wrapped


@pytest.fixture
def scan_path(make_scan: Callable[..., Scan], tmp_path: Path) -> Path:
    write_scan(make_scan(pixels=(12, 16)), tmp_path / "scan.h5")
    return tmp_path / "scan.h5"


def test_help_and_version() -> None:
    group = command()
    runner = CliRunner()
    told = runner.invoke(group, ["--help"])
    assert told.exit_code == 0
    assert "radiation-protection rules" in " ".join(told.output.split())
    version = runner.invoke(group, ["--version"])
    assert version.output.strip().endswith(spectral.__version__)
    for name in group.list_commands(click.Context(group)):
        assert name in told.output
        one = runner.invoke(group, [name, "--help"])
        assert one.exit_code == 0, name
        assert one.output.startswith("Usage: ")


def test_the_verdict_carries_its_safety_sentence() -> None:
    told = CliRunner().invoke(command(), ["check", "--help"]).output
    assert "no diagnosis and no decision" in " ".join(told.split())


def test_check_prints_a_verdict(scan_path: Path) -> None:
    done = CliRunner().invoke(command(), ["check", str(scan_path)])
    assert done.exit_code == 0
    assert done.stdout.startswith(f"{scan_path}: fit")
    assert done.stderr == ""


def test_check_for_machines(scan_path: Path) -> None:
    done = CliRunner().invoke(command(), ["check", str(scan_path), "--json"])
    assert done.exit_code == 0
    summary = json.loads(done.stdout)
    assert summary["verdict"].startswith("fit")
    assert summary["exposures"] == 17


def test_a_scan_that_is_not_fit_ends_with_one(
    make_scan: Callable[..., Scan], tmp_path: Path
) -> None:
    write_scan(make_scan(pixels=(12, 16), opens=0), tmp_path / "scan.h5")
    done = CliRunner().invoke(command(), ["check", str(tmp_path / "scan.h5")])
    assert done.exit_code == 1
    assert ": not fit" in done.stdout
    assert done.stderr.count("\n") == 1
    assert "there is no open exposure" in done.stderr


def test_a_script_does_as_well_as_a_file(
    make_scan: Callable[..., Scan], tmp_path: Path
) -> None:
    scan = make_scan(pixels=(12, 16), wedge=False, opens=2)
    for i, k in np.ndindex(4, 4):
        image = scan.counts.read([i])[0, k].astype(np.uint16)
        tifffile.imwrite(tmp_path / f"{i + 1}_{k + 1}.tif", image)
    text = """
source = { voltage_kv = 90 }
detector = { thresholds_kev = [20, 32, 45, 58] }
defaults = { count_time_s = 0.5, files = "{exposure}_{threshold}.tif" }
[[exposure]]
role = "dark"
repeats = 2
[[exposure]]
role = "open"
repeats = 2
"""
    path = tmp_path / "scan.toml"
    path.write_text(text)
    done = CliRunner().invoke(command(), ["check", str(path)])
    assert done.exit_code == 0, done.stderr
    assert "4 exposures (2 dark, 2 open)" in done.stdout
    path.write_text(text.replace("repeats = 2", "repeats = 3"))
    done = CliRunner().invoke(command(), ["check", str(path)])
    assert done.exit_code == 1
    assert "line 8: there is no image" in done.stderr


def test_a_broken_file_is_one_sentence(tmp_path: Path) -> None:
    path = tmp_path / "scan.h5"
    path.write_text("no scan")
    done = CliRunner().invoke(command(), ["check", str(path)])
    assert done.exit_code == 1
    assert done.stdout == ""
    assert done.stderr.startswith(f"Error: {path}: this is not an HDF5 file")
    assert done.stderr.count("\n") == 1


@pytest.mark.parametrize("words", [["check"], ["check", "absent.h5"], ["weigh"]])
def test_wrong_use_ends_with_two(words: list[str]) -> None:
    done = CliRunner().invoke(command(), words)
    assert done.exit_code == 2
    assert done.stdout == ""


def test_as_a_module_from_anywhere(scan_path: Path) -> None:
    done = subprocess.run(
        [sys.executable, "-m", "spectral_cli", "check", str(scan_path), "--json"],
        cwd="/",
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout)["rows"] == 12
    assert done.stderr == ""


@pytest.mark.parametrize(
    ("error", "code", "sentence"),
    [
        (InputError("the words\nare wrong"), 2, "Error: the words are wrong\n"),
        (CalibrationError("the data are poor"), 1, "Error: the data are poor\n"),
        (
            PermissionError(13, "Permission denied", "x.h5"),
            1,
            "x.h5: Permission denied",
        ),
        (MemoryError(), 1, "not enough memory"),
    ],
)
def test_errors_become_endings(error: Exception, code: int, sentence: str) -> None:
    @click.command()
    @ends_well
    def fail() -> None:
        raise error

    done = CliRunner().invoke(fail, [])
    assert done.exit_code == code
    assert sentence in done.stderr
    assert "Traceback" not in done.stderr


def test_quality_warnings_become_notes() -> None:
    @click.command()
    @ends_well
    def warn() -> None:
        warnings.warn("look at this", QualityWarning, stacklevel=2)

    done = CliRunner().invoke(warn, [])
    assert done.exit_code == 0
    assert done.stderr == "note: look at this\n"


def test_progress_is_shown_on_a_terminal_only(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    progress = outcome().progress
    with progress("exposures") as tell:
        tell(1, 2)
    assert capsys.readouterr().err == ""
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True, raising=False)
    with progress("exposures") as tell:
        tell(1, 2)
    assert "exposures: 1 of 2" in capsys.readouterr().err


def test_an_interruption_is_none_of_the_data(
    capsys: pytest.CaptureFixture[str],
) -> None:
    """130 as shells have it, 128 and the signal's number (common practice)."""

    def interrupted() -> None:
        raise KeyboardInterrupt

    with pytest.raises(click.exceptions.Exit) as end:
        ends_well(interrupted)()
    assert end.value.exit_code == 130
    assert capsys.readouterr().err.strip() == "interrupted before the end"
