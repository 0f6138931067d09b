"""Every command used wrongly: one sentence, the right exit code, nothing written."""

from __future__ import annotations

import importlib
import json
from dataclasses import replace
from importlib.metadata import entry_points
from typing import TYPE_CHECKING

import click
import h5py
import numpy as np
import pytest
from click.testing import CliRunner

from spectral.calibration.calibration_file import write_calibration
from spectral.scans.scan_file import write_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from click.testing import Result

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

pytestmark = pytest.mark.end_to_end


def command(*words: object) -> Result:
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    group = script.load()
    assert isinstance(group, click.Group)
    return CliRunner().invoke(group, list(map(str, words)))


@pytest.fixture
def folder(
    make_scan: Callable[..., Scan],
    make_calibration: Callable[..., Calibration],
    make_series: Callable[..., Scan],
    tmp_path: Path,
) -> Path:
    """A wedge scan, a calibration, an object scan, and files that are none of them."""
    write_scan(make_scan(pixels=(6, 8)), tmp_path / "wedge.h5")
    calibration = make_calibration((6, 8))
    write_calibration(calibration, tmp_path / "calibration.h5")
    write_scan(make_series(calibration, 2), tmp_path / "object.h5")
    (tmp_path / "text.h5").write_text("threshold,counts\n")
    (tmp_path / "empty.h5").write_bytes(b"")
    (tmp_path / "scan.toml").write_text("[source]\nvoltage_kv = 90\n")
    whole = (tmp_path / "object.h5").read_bytes()
    (tmp_path / "half.h5").write_bytes(whole[: len(whole) // 2])
    return tmp_path


def held(folder: Path) -> dict[str, bytes]:
    return {p.name: p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def sentence(done: Result) -> str:
    """The one line of an error, whatever click says of the usage before it."""
    lines = [line for line in done.stderr.splitlines() if line.startswith("Error: ")]
    assert len(lines) == 1, done.stderr
    assert isinstance(done.exception, SystemExit)
    return lines[0]


WRONG_FILES = [
    ("check", "half.h5", "the file is truncated; copy it again"),
    ("check", "empty.h5", "this is not an HDF5 file"),
    ("check", "text.h5", "this is not an HDF5 file"),
    ("check", "calibration.h5", "so this is not a scan"),
    ("check", "scan.toml", "scan.toml, line 1:"),
    ("calibrate", "calibration.h5", "so this is not a scan"),
    ("calibrate", "object.h5", "sensor_material and sensor_thickness are needed"),
    ("simulate", "wedge.h5", "wedge.h5"),
    ("simulate", "scan.toml", "scan.toml, line 1:"),
    ("thresholds", "wedge.h5", "wedge.h5"),
    ("report", "half.h5", "the file is truncated; copy it again"),
    ("report", "text.h5", "this is not an HDF5 file"),
    ("decompose wedge.h5", "object.h5", "this is not a calibration file; make one"),
    ("decompose calibration.h5", "calibration.h5", "so this is not a scan"),
    ("decompose calibration.h5", "half.h5", "the file is truncated; copy it again"),
    ("refresh wedge.h5", "object.h5", "this is not a calibration file; make one"),
    ("refresh calibration.h5", "calibration.h5", "so this is not a scan"),
    ("compare calibration.h5", "wedge.h5", "this is not a calibration file; make one"),
    ("compare half.h5", "calibration.h5", "the file is truncated; copy it again"),
]


@pytest.mark.parametrize(("words", "file", "text"), WRONG_FILES)
def test_the_wrong_file_is_one_sentence_and_writes_nothing(
    folder: Path, words: str, file: str, text: str
) -> None:
    before = held(folder)
    name, *others = words.split()
    output = [] if name == "check" else ["-o", folder / "out.h5"]
    done = command(name, *(folder / o for o in others), folder / file, *output)
    assert done.exit_code == 1
    assert text in sentence(done)
    assert any(f"{folder / read}" in sentence(done) for read in (file, *others))
    assert held(folder) == before


READERS = {
    "calibrate": ("wedge.h5",),
    "decompose": ("calibration.h5", "object.h5"),
    "refresh": ("calibration.h5", "object.h5"),
    "report": ("object.h5",),
    "simulate": ("scan.toml",),
    "thresholds": ("wedge.h5",),
    "compare": ("calibration.h5", "calibration.h5"),
}


@pytest.mark.parametrize("name", READERS)
def test_an_input_is_never_written_over(folder: Path, name: str) -> None:
    before = held(folder)
    for file in READERS[name]:
        done = command(name, *(folder / f for f in READERS[name]), "-o", folder / file)
        assert done.exit_code == 2
        assert f"{file} is read by this command; name another output" in sentence(done)
    assert held(folder) == before


@pytest.mark.parametrize("name", READERS)
def test_an_output_without_a_folder_is_refused_at_once(folder: Path, name: str) -> None:
    before = held(folder)
    files = [folder / f for f in READERS[name]]
    done = command(name, *files, "-o", folder / "none" / "out.h5")
    assert done.exit_code == 2
    assert "none does not exist; make it, or name another output" in sentence(done)
    done = command(name, *files, "-o", "/proc/out.h5")
    assert done.exit_code == 2
    assert "nothing can be written into the folder /proc" in sentence(done)
    assert held(folder) == before


def test_two_outputs_are_not_one_file(folder: Path) -> None:
    out = folder / "out.h5"
    done = command("simulate", folder / "scan.toml", "-o", out, "--truth", out)
    assert done.exit_code == 2
    assert "is named for two files; name another output" in sentence(done)
    assert not out.exists()


WRONG_WORDS = [
    (("--without", 17), "exposure 17 cannot be left out; exposures 0 to 16 exist"),
    (("--without", -1), "exposure -1 cannot be left out; exposures 0 to 16 exist"),
    (("--setting", 20), "--setting goes with --thresholds; name the file of energies"),
]


@pytest.mark.parametrize(("words", "text"), WRONG_WORDS)
def test_words_that_cannot_be_are_wrong_use(
    folder: Path, words: tuple[object, ...], text: str
) -> None:
    done = command("calibrate", folder / "wedge.h5", "-o", folder / "out.h5", *words)
    assert done.exit_code == 2
    assert text in sentence(done)
    assert not (folder / "out.h5").exists()


WRONG_EXPOSURES = [
    ((3, 3), "exposure 3 is asked for twice"),
    ((99,), "exposures 0 to 6 exist, asked for 99"),
    ((3, -1), "exposures 0 to 6 exist, asked for -1"),
    ((0,), "exposure 0 is dark: it shows no object"),
]


def test_a_series_is_told_whole_where_few_of_it_are_summed_up(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    module = importlib.import_module("spectral_cli.commands.decompose")
    words = (folder / "calibration.h5", folder / "object.h5", "-o", folder / "m.h5")
    whole = command("decompose", *words).stdout
    assert whole.startswith("2 exposures of 48 pixels decomposed")
    assert "figures from" not in whole
    monkeypatch.setattr(module, "SHOWN", 1)
    done = command("decompose", *words)
    assert done.stdout.startswith("2 exposures of 48 pixels decomposed")
    assert "figures from 1 of them, spread over the series" in done.stdout
    found = json.loads(command("decompose", *words, "--json").stdout)
    assert (found["exposures"], found["summed_up"]) == (2, 1)


def test_an_object_scan_of_another_setting_is_refused(
    folder: Path, make_calibration: Callable[..., Calibration]
) -> None:
    write_calibration(make_calibration((6, 9)), folder / "wide.h5")
    before = held(folder)
    files = folder / "wide.h5", folder / "object.h5"
    done = command("decompose", *files, "-o", folder / "out.h5")
    assert done.exit_code == 1
    text = (
        "it has 6 x 8 pixels (rows x columns) and not 6 x 9; use the calibration of "
        "its setting"
    )
    wanted = f"{files[1]} does not go with the calibration: {text}"
    assert wanted in sentence(done)
    assert held(folder) == before


@pytest.mark.parametrize(("numbers", "text"), WRONG_EXPOSURES)
def test_exposures_that_cannot_be_are_wrong_use(
    folder: Path, numbers: tuple[int, ...], text: str
) -> None:
    before = held(folder)
    files = (folder / "calibration.h5", folder / "object.h5")
    words = [word for n in numbers for word in ("--exposure", n)]
    done = command("decompose", *files, "-o", folder / "out.h5", *words)
    assert done.exit_code == 2
    assert f"{folder / 'object.h5'}: {text}" in sentence(done)
    assert held(folder) == before


def test_calibrations_of_two_settings_are_both_named(
    folder: Path, make_calibration: Callable[..., Calibration]
) -> None:
    write_calibration(make_calibration((6, 9)), folder / "wide.h5")
    before = held(folder)
    files = folder / "calibration.h5", folder / "wide.h5"
    done = command("compare", *files, "-o", folder / "out.html")
    assert done.exit_code == 1
    text = (
        "it has 6 x 9 pixels (rows x columns) and not 6 x 8; compare calibrations of "
        "one setting"
    )
    wanted = f"{files[1]} cannot be compared with {files[0]}: {text}"
    assert wanted in sentence(done)
    assert held(folder) == before


def test_a_report_names_the_file_that_lacks_a_row(folder: Path) -> None:
    files = (folder / "calibration.h5", folder / "object.h5")
    assert command("decompose", *files, "-o", folder / "maps.h5").exit_code == 0
    before = held(folder)
    for name, text in (
        ("maps.h5", "row 6 is not in the maps, which have rows 0 to 5"),
        ("calibration.h5", "exposure and row choose among maps"),
    ):
        path = folder / name
        done = command("report", path, "--row", 6, "-o", folder / "page.html")
        assert done.exit_code == 2
        assert f"{path}: {text}" in sentence(done)
    assert held(folder) == before


def test_a_report_of_maps_with_unexplained_gaps_is_refused(folder: Path) -> None:
    files = (folder / "calibration.h5", folder / "object.h5")
    assert command("decompose", *files, "-o", folder / "maps.h5").exit_code == 0
    with h5py.File(folder / "maps.h5", "r+") as file:
        file["entry/maps/areal_density"][1, 0, 2, 3] = np.nan
    before = held(folder)
    done = command("report", folder / "maps.h5", "-o", folder / "page.html")
    assert done.exit_code == 1
    assert f"{folder / 'maps.h5'}: areal_density of exposure 4" in sentence(done)
    assert "no flag says why" in sentence(done)
    assert held(folder) == before


def test_a_scheduler_that_is_not_there_leaves_nothing(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    pytest.importorskip("distributed")
    monkeypatch.setattr("spectral.decomposition.cluster.ANSWER", "1s")
    before = sorted(folder.iterdir())
    files = (folder / "calibration.h5", folder / "object.h5")
    words = ("-o", folder / "out.h5", "--scheduler", "tcp://127.0.0.1:9")
    done = command("decompose", *files, *words)
    assert done.exit_code == 2
    assert "no scheduler answers at tcp://127.0.0.1:9" in sentence(done)
    assert sorted(folder.iterdir()) == before


def test_check_and_report_say_the_same_of_what_a_model_cannot_take(
    make_scan: Callable[..., Scan], tmp_path: Path
) -> None:
    path = tmp_path / "wedge.h5"
    write_scan(replace(make_scan(pixels=(6, 8)), voltage_kv=57.0), path)
    done = command("check", path)
    assert done.exit_code == 1
    text = "threshold_energy 58 keV is not below the tube's voltage, 57 kV"
    assert text in sentence(done)
    page = tmp_path / "page.html"
    assert command("report", path, "-o", page).exit_code == 0
    assert text[1:].replace("'", "&#x27;") in page.read_text(encoding="utf-8")


def test_names_beyond_ascii_are_no_trouble(
    make_scan: Callable[..., Scan], tmp_path: Path
) -> None:
    folder = tmp_path / "Röntgen µ 線"
    folder.mkdir()
    write_scan(make_scan(pixels=(6, 8)), folder / "ö 1.h5")
    done = command("check", folder / "ö 1.h5")
    assert done.exit_code == 0, done.output
    assert "ö 1.h5: fit" in done.stdout


def test_the_demonstration_replaces_nothing_of_others(folder: Path) -> None:
    before = held(folder)
    done = command("demo", folder)
    assert done.exit_code == 2
    assert "which the demonstration did not make and would replace" in sentence(done)
    (folder / "wedge.h5").unlink()
    assert "holds calibration.h5, which" in sentence(command("demo", folder))
    assert held(folder) == {k: v for k, v in before.items() if k != "wedge.h5"}


def test_the_demonstration_needs_a_folder_that_takes_files() -> None:
    done = command("demo", "/proc/demonstration")
    assert done.exit_code == 2
    assert "/proc/demonstration: the folder takes no files" in sentence(done)


@pytest.mark.parametrize("fill", [0, 2**32 - 1, 1000])
def test_a_report_of_a_useless_scan_leaks_no_warning(
    make_scan: Callable[..., Scan], tmp_path: Path, fill: int
) -> None:
    scan = make_scan(pixels=(6, 8))
    counts = np.full(scan.shape, fill, np.uint32)
    write_scan(scan.with_counts(counts), tmp_path / "scan.h5")
    done = command("report", tmp_path / "scan.h5", "-o", tmp_path / "page.html")
    assert done.exit_code == 0, done.output
    assert "not fit" in (tmp_path / "page.html").read_text(encoding="utf-8").lower()


def test_a_script_may_be_spelled_in_capitals(folder: Path) -> None:
    (folder / "scan.toml").rename(folder / "SCAN.TOML")
    done = command("check", folder / "SCAN.TOML")
    assert done.exit_code == 1
    assert "SCAN.TOML, line 1:" in sentence(done)


SIMULATED = """
[source]
voltage_kv = 40
filters = [{ material = "Al", thickness_mm = 1.0 }]
[detector]
use = "detector.toml"
rows = 2
columns = 2
[[material]]
name = "PMMA"
formula = "C5H8O2"
density_g_cm3 = 1.19
[[exposure]]
role = "open"
count_time_s = 0.01
current_ma = 1.0
[virtual]
photons_per_mas = 100
seed = 1
"""
DESCRIBED = """
name = "made up"
[sensor]
material = "Si"
density_g_cm3 = 2.33
thickness_um = 300.0
pitch_um = 100.0
bias_v = 200.0
pair_energy_ev = 3.62
fano = 0.115
relative_permittivity = 11.7
[electronics]
thresholds_kev = [10.0, 20.0]
noise_kev = 0.8
dead_time_ns = 100.0
"""


@pytest.mark.parametrize(
    ("old", "new", "text"),
    [
        ('"C5H8O2"', '"Foo9"', "'Foo9' is neither a chemical formula nor a known"),
        ("noise_kev = 0.8", "noise_kev = nan", "noise_kev must not be negative and"),
        ("dead_time_ns = 100.0", "dead_time_ns = inf", "dead_time_ns must be positive"),
        ("um = 300.0", 'um = "thick"', "thickness_um must be a number above zero"),
        (
            "photons_per_mas = 100",
            "photons_per_mas = 1e15",
            "scan.toml, line 18: exposure 0 would send 1e+13 photons upon a pixel",
        ),
    ],
)
def test_a_simulation_of_what_cannot_be_names_the_script(
    tmp_path: Path, old: str, new: str, text: str
) -> None:
    assert (SIMULATED + DESCRIBED).count(old) == 1
    (tmp_path / "detector.toml").write_text(DESCRIBED.replace(old, new))
    (tmp_path / "scan.toml").write_text(SIMULATED.replace(old, new))
    before = held(tmp_path)
    done = command("simulate", tmp_path / "scan.toml", "-o", tmp_path / "out.h5")
    assert done.exit_code == 1
    assert text in sentence(done)
    assert ".toml" in sentence(done)
    assert held(tmp_path) == before
