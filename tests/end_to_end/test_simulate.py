"""A scan script simulated: repeatable, as told, and faults in one sentence."""

from __future__ import annotations

import json
from importlib.metadata import entry_points
from typing import TYPE_CHECKING

import click
import numpy as np
import pytest
import tifffile
from click.testing import CliRunner

from spectral.errors import FileFormatError, ScanError
from spectral.scans.scan_file import read_scan
from spectral.scans.truth_file import read_truth
from spectral.virtual.script_scan import SimulatedScript, simulate_script
from spectral.virtual.wedge_description import read_wedge

if TYPE_CHECKING:
    from pathlib import Path

    from click.testing import Result

pytestmark = pytest.mark.end_to_end

DETECTOR = """
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
[spread]
threshold_kev = 0.2
area = 0.02
[bad_pixels]
dead = 0.2
"""
SCRIPT = """
title = "small (invented)"
[source]
voltage_kv = 40
filters = [{ material = "Al", thickness_mm = 1.0 }]
[detector]
use = "detector.toml"
thresholds_kev = [10, 20]
rows = 8
columns = 10
[[material]]
name = "PMMA"
formula = "PMMA"
density_g_cm3 = 1.19
[defaults]
count_time_s = 0.1
current_ma = 1.0
[[exposure]]
role = "dark"
[[exposure]]
role = "open"
[[exposure]]
role = "wedge"
step = "five"
layers_mm = { PMMA = 5.0 }
[[exposure]]
role = "object"
[virtual]
photons_per_mas = 20000
seed = 3
detector_seed = 8
"""
OBJECT = """
[[virtual.material]]
name = "Al"
formula = "Al"
density_g_cm3 = 2.7
[[virtual.object]]
shape = "rectangle"
material = "PMMA"
thickness_mm = 10.0
region = "plate"
[[virtual.object]]
shape = "disc"
material = "Al"
centre_mm = [0.4, 0.3]
radius_mm = 0.15
thickness_mm = 2.0
displaces = "PMMA"
region = "pin"
[[virtual.object]]
shape = "ramp"
material = "PMMA"
column_mm = [0.6, 1.0]
along = "columns"
thickness_mm = [0.0, 6.0]
"""


def written(folder: Path, script: str = SCRIPT + OBJECT) -> Path:
    (folder / "detector.toml").write_text(DETECTOR, encoding="utf-8")
    path = folder / "scan.toml"
    path.write_text(script, encoding="utf-8")
    return path


def command(*words: object) -> Result:
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    group = script.load()
    assert isinstance(group, click.Group)
    return CliRunner().invoke(group, ["simulate", *map(str, words)])


def counts(made: SimulatedScript) -> np.ndarray:
    return made.scan.counts.read(range(made.scan.shape[0])).astype(np.int64)


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> SimulatedScript:
    return simulate_script(written(tmp_path_factory.mktemp("script")))


def test_same_seed_same_file(tmp_path: Path) -> None:
    script = written(tmp_path)
    words = ("--truth", tmp_path / "truth.h5", "--json")
    first = command(script, "-o", tmp_path / "a.h5", *words)
    assert first.exit_code == 0, first.output
    again = command(script, "-o", tmp_path / "b.h5", "--threads", 1)
    assert again.exit_code == 0, again.output
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()
    written(tmp_path, (SCRIPT + OBJECT).replace("seed = 3", "seed = 4", 1))
    assert command(script, "-o", tmp_path / "c.h5").exit_code == 0
    assert (tmp_path / "a.h5").read_bytes() != (tmp_path / "c.h5").read_bytes()

    summary = json.loads(first.stdout)
    assert summary["roles"] == {"dark": 1, "open": 1, "wedge": 1, "object": 1}
    assert summary["rows"], summary["columns"] == (8, 10)
    scan, truth = read_scan(tmp_path / "a.h5"), read_truth(tmp_path / "truth.h5")
    # the scan knows its basis only; the truth knows what stood in the beam
    assert [m.name for m in scan.materials] == ["PMMA"]
    assert truth.material == ("PMMA", "Al")
    assert np.isnan(scan.thickness_mm[3]).all()
    assert scan.thickness_mm[2].tolist() == [5.0]
    assert (truth.seed, truth.detector_seed) == (3, 8)


def test_open_counts_are_those_of_the_brightest(tmp_path: Path) -> None:
    dim = '[[exposure]]\nrole = "open"\ncurrent_ma = 0.5\n'
    at = SCRIPT.index("[[exposure]]")
    script = written(tmp_path, SCRIPT[:at] + dim + SCRIPT[at:] + OBJECT)
    done = command(script, "-o", tmp_path / "a.h5", "--json")
    means = read_scan(tmp_path / "a.h5").counts.read([0, 2]).mean(axis=(2, 3))
    assert means[0, 0] < 0.7 * means[1, 0]
    assert json.loads(done.stdout)["open_counts"] == pytest.approx(means[1])


def test_pixels_stay_and_photons_change(made: SimulatedScript, tmp_path: Path) -> None:
    other = simulate_script(
        written(tmp_path, (SCRIPT + OBJECT).replace("seed = 3", "seed = 4", 1))
    )
    np.testing.assert_array_equal(made.truth.threshold, other.truth.threshold)
    np.testing.assert_array_equal(made.truth.area, other.truth.area)
    assert not np.array_equal(counts(made), counts(other))
    apart = simulate_script(
        written(
            tmp_path,
            (SCRIPT + OBJECT).replace("detector_seed = 8", "detector_seed = 9"),
        )
    )
    assert not np.array_equal(made.truth.threshold, apart.truth.threshold)


def test_shapes_lie_where_they_are_drawn(made: SimulatedScript) -> None:
    truth = made.truth
    polymer, metal = truth.object_areal_density
    pin = truth.region == truth.region_name.index("pin")
    # about a corner of four pixels: their middles are 0.07 mm away, the next 0.158
    assert pin.sum() == 4
    assert pin[3:5, 2:4].all()
    np.testing.assert_allclose(metal[pin], 0.54)
    assert metal[~pin].max() == 0.0
    np.testing.assert_allclose(polymer[pin], 0.8 * 1.19)
    np.testing.assert_allclose(polymer[0, :6], 1.19)
    np.testing.assert_allclose(
        polymer[0, 6:], 0.119 * (10.0 + np.array([0.0, 2.0, 4.0, 6.0]))
    )
    assert made.truth.kind.max() == 0
    # aluminium stops more than the PMMA it displaces
    seen = counts(made)[3, 0]
    assert seen[pin].mean() < 0.8 * seen[:, :2].mean()


def test_fewer_pixels_show_the_same_object(tmp_path: Path) -> None:
    small = simulate_script(written(tmp_path), pixels=(4, 5))
    assert small.scan.shape == (4, 2, 4, 5)
    metal = small.truth.object_areal_density[1]
    assert metal.max() == pytest.approx(0.54)
    assert 0 < np.count_nonzero(metal) <= 2


def test_bad_pixels_come_only_when_asked(tmp_path: Path) -> None:
    bad = simulate_script(written(tmp_path, SCRIPT + "bad_pixels = true\n" + OBJECT))
    assert bad.truth.kind.max() > 0
    assert counts(bad)[1][:, bad.truth.kind == 1].max() == 0


def test_faults_are_hidden_in_the_counts(made: SimulatedScript, tmp_path: Path) -> None:
    planted = """
[[virtual.fault]]
step = "five"
current_ma = 0.5
layers_mm = { PMMA = 15.0 }
[[virtual.fault]]
exposure = [2, 4]
threshold_drift_kev = 3.0
column_mm = [0.0, 0.5]
"""
    faulty = simulate_script(written(tmp_path, SCRIPT + OBJECT + planted))
    scan, truth = faulty.scan, faulty.truth
    assert scan.current_ma is not None
    assert scan.current_ma.tolist() == [0.0, 1.0, 1.0, 1.0]
    assert scan.thickness_mm[2].tolist() == [5.0]
    assert truth.current.tolist() == [0.0, 1.0, 0.5, 1.0]
    assert truth.areal_density[2, 0] == pytest.approx(1.785)
    assert truth.threshold_drift[1, :, :5].min() == 3.0
    assert truth.threshold_drift[1, :, 5:].max() == 0.0
    assert truth.threshold_drift[2].max() == 0.0
    before, after = counts(made), counts(faulty)
    assert after[2].mean() < 0.5 * before[2].mean()
    assert after[1, 0, :, :5].mean() < 0.97 * before[1, 0, :, :5].mean()
    np.testing.assert_array_equal(after[1, :, :, 5:], before[1, :, :, 5:])


@pytest.mark.parametrize("suffix", [".npy", ".tif"])
def test_a_map_file_is_the_object(tmp_path: Path, suffix: str) -> None:
    mm = np.arange(80, dtype=np.float32).reshape(8, 10) / 10.0
    path = tmp_path / f"map{suffix}"
    np.save(path, mm) if suffix == ".npy" else tifffile.imwrite(path, mm)
    entry = f'[[virtual.object]]\nfile = "map{suffix}"\nmaterial = "PMMA"\n'
    found = simulate_script(written(tmp_path, SCRIPT + entry)).truth
    np.testing.assert_allclose(found.object_areal_density[0], 0.119 * mm, rtol=1e-6)


RECTANGLE = '[[virtual.object]]\nshape = "rectangle"\nmaterial = "PMMA"\n'


@pytest.mark.parametrize(
    ("script", "said"),
    [
        (SCRIPT.partition("[virtual]")[0], r"has no \[virtual\] table"),
        (SCRIPT + "photon = 2\n", r"line 32: 'photon' is not known here"),
        (SCRIPT, r"exposure 3 is an object, but nothing says what it is"),
        (
            SCRIPT.replace("photons_per_mas = 20000", "") + OBJECT,
            r"\[virtual\] needs photons_per_mas",
        ),
        (SCRIPT + "heel = -2\n" + OBJECT, r"\[virtual\]: heel must exceed -1"),
        (SCRIPT + 'bad_pixels = "no"\n' + OBJECT, "bad_pixels must be true or false"),
        (SCRIPT + 'detector = "gone.toml"\n' + OBJECT, r"there is no file .*gone.toml"),
        (
            SCRIPT.replace('use = "detector.toml"', "") + OBJECT,
            r"\[virtual\] needs detector = ",
        ),
        (SCRIPT + RECTANGLE, r"needs thickness_mm"),
        (
            SCRIPT + RECTANGLE.replace("rectangle", "star"),
            r"shape is 'star'; it must be one of rectangle, disc, ramp",
        ),
        (
            SCRIPT + RECTANGLE.replace("PMMA", "gold"),
            r"material names 'gold', which is neither",
        ),
        (
            SCRIPT + '[[virtual.object]]\nmaterial = "PMMA"\n',
            "an object needs shape = or file =",
        ),
        (
            SCRIPT + RECTANGLE + "thickness_mm = 1\nrow_mm = [2, 1]\n",
            r"row_mm must rise, not \[2, 1\]",
        ),
        (
            SCRIPT + RECTANGLE + "thickness_mm = 1\nrow_mm = 2\n",
            "row_mm must be two numbers",
        ),
        (
            SCRIPT + RECTANGLE.replace("rectangle", "disc"),
            "an object of this shape needs centre_mm",
        ),
        (
            SCRIPT
            + RECTANGLE.replace("rectangle", "ramp")
            + 'along = "rim"\nthickness_mm = [1, 2]\n',
            "along is 'rim'",
        ),
        (
            SCRIPT + RECTANGLE + 'areal_density_g_cm2 = 1\ndisplaces = "PMMA"\n',
            "displaces needs thickness_mm",
        ),
        (
            SCRIPT + OBJECT.replace("thickness_mm = 10.0", "thickness_mm = 1.0"),
            "there is less PMMA than is to be displaced",
        ),
        (
            SCRIPT + '[[virtual.object]]\nfile = "gone.npy"\nmaterial = "PMMA"\n',
            "gone.npy gives no map",
        ),
        (
            SCRIPT
            + '[[virtual.object]]\nfile = "x.npy"\nholds = "m"\nmaterial = "PMMA"\n',
            "holds is 'm'",
        ),
        (
            SCRIPT + OBJECT.replace('name = "Al"', 'name = "PMMA"'),
            "the material 'PMMA' is listed twice",
        ),
        (
            SCRIPT + OBJECT + "[[virtual.fault]]\nexposure = 9\n",
            "no exposure has number = 9",
        ),
        (
            SCRIPT + OBJECT + '[[virtual.fault]]\nstep = "six"\n',
            "no exposure has step = 'six'",
        ),
        (
            SCRIPT + OBJECT + "[[virtual.fault]]\nlayers_mm = { Fe = 1 }\n",
            "layers_mm names 'Fe', which is unknown",
        ),
        (
            SCRIPT + OBJECT + "[[virtual.fault]]\nlayers_mm = 3\n",
            "layers_mm must be a table",
        ),
    ],
)
def test_what_cannot_be_is_one_sentence(tmp_path: Path, script: str, said: str) -> None:
    path = written(tmp_path, script)
    with pytest.raises(ScanError, match=said) as caught:
        simulate_script(path)
    assert str(path) in str(caught.value)
    ended = command(path, "-o", tmp_path / "no.h5")
    assert ended.exit_code == 1
    assert not (tmp_path / "no.h5").exists()


def test_a_truth_file_is_known_as_such(tmp_path: Path) -> None:
    script = written(tmp_path)
    assert command(script, "-o", tmp_path / "a.h5", "--pixels", 2, 2).exit_code == 0
    with pytest.raises(FileFormatError, match="this is no truth file"):
        read_truth(tmp_path / "a.h5")


def test_a_wedge_description_is_read(tmp_path: Path) -> None:
    path = tmp_path / "wedge.toml"
    text = """
name = "two"
[[material]]
name = "PMMA"
formula = "PMMA"
density_g_cm3 = 1.19
plates_mm = [10.0, 20.0]
[[material]]
name = "Al"
formula = "Al"
density_g_cm3 = 2.7
[stacks]
thickness_mm = [[10, 0], [30, 2.5]]
"""
    path.write_text(text, encoding="utf-8")
    wedge = read_wedge(path)
    assert [m.name for m in wedge.materials] == ["PMMA", "Al"]
    assert wedge.plates_mm == ((10.0, 20.0), ())
    np.testing.assert_allclose(wedge.areal_density, [[1.19, 0.0], [3.57, 0.675]])
    path.write_text(text.replace("[10, 0]", "[10]"), encoding="utf-8")
    with pytest.raises(ScanError, match=r"line 13: stack 1 is \[10\]; it must list 2"):
        read_wedge(path)
    path.write_text(text.partition("[stacks]")[0], encoding="utf-8")
    with pytest.raises(ScanError, match=r"\[stacks\] needs thickness_mm"):
        read_wedge(path)
