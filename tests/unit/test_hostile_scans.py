"""Scans that lie: what the reader, the check and the model say of them."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np
import pytest

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.calibration.scan_sentences import told_of
from spectral.calibration.wedge_data import wedge_data
from spectral.errors import CalibrationError, FileFormatError, InputError, ScanError
from spectral.forward.scan_facts import scan_faults
from spectral.forward.setup import Setup
from spectral.scans.nexus import plain
from spectral.scans.scan import MOST_G_CM2, CountsInMemory, Filter, Layer
from spectral.scans.scan_check import Verdict, check_scan
from spectral.scans.scan_file import read_scan, write_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.scans.scan import Scan

SAMPLE = "entry/sample"
DETECTOR = "entry/instrument/detector"


@pytest.fixture
def scan(make_scan: Callable[..., Scan]) -> Scan:
    return make_scan(pixels=(6, 8))


@pytest.fixture
def path(scan: Scan, tmp_path: Path) -> Path:
    write_scan(scan, tmp_path / "scan.h5")
    return tmp_path / "scan.h5"


def stored(file: h5py.File, name: str, value: Any) -> None:
    """Another content for a field, its unit kept."""
    units = dict(file[name].attrs)
    del file[name]
    file[name] = value
    file[name].attrs.update(units)


def changed(file: h5py.File, name: str, where: Any, value: float) -> None:
    kept = file[name][()]
    kept[where] = value
    stored(file, name, kept)


FAULTS: list[tuple[Callable[[h5py.File], object], str]] = [
    (
        lambda f: changed(f, f"{SAMPLE}/density", 0, np.inf),
        "density of PMMA is inf g/cm3; it must be more than zero and less than 25",
    ),
    (
        lambda f: changed(f, f"{SAMPLE}/density", 0, 1190.0),
        "density of PMMA is 1190 g/cm3; it must .* is its unit right",
    ),
    (
        lambda f: stored(f, f"{SAMPLE}/density", np.ones((2, 1))),
        "density has 2 x 1 entries, there are 2 materials",
    ),
    (
        lambda f: stored(f, f"{SAMPLE}/material", np.array([b"", b"Al"])),
        "material has an empty name; name each material",
    ),
    (
        lambda f: changed(f, f"{SAMPLE}/thickness", (2, 0), 10.0),
        "PMMA in exposure 2 is 10 mm, but its role is open; make it zero, or give",
    ),
    (
        lambda f: changed(f, f"{SAMPLE}/thickness", (5, 0), 1e9),
        r"PMMA in exposure 5 \(wedge\) is 1e\+09 mm, behind which nothing counts; corr",
    ),
    (
        lambda f: changed(f, f"{SAMPLE}/thickness", (6, 1), 1200.0),
        r"Al in exposure 6 \(wedge\) is 1200 mm, behind which nothing counts; correct",
    ),
    (
        lambda f: stored(f, f"{SAMPLE}/role", np.array([b"op\xe9n"] + [b"open"] * 16)),
        "role of exposure 0 is 'opén'; it must be one of dark, open, wedge, object",
    ),
    (
        lambda f: f.copy("entry", "second"),
        "2 groups with NX_class 'NXentry' hold an instrument; name the scan's in the",
    ),
]


def test_behind_the_most_that_is_believed_nothing_counts() -> None:
    """By the total cross sections of the library xraylib."""
    xraylib = pytest.importorskip("xraylib")
    least = min(xraylib.CS_Total(z, 160.0) for z in range(1, 93))
    assert 1e10 * np.exp(-least * MOST_G_CM2) < 0.01


@pytest.mark.parametrize(("spoil", "sentence"), FAULTS)
def test_a_file_that_lies_is_refused(
    path: Path, spoil: Callable[[h5py.File], object], sentence: str
) -> None:
    with h5py.File(path, "r+") as file:
        file.attrs.pop("default", None)
        spoil(file)
    with pytest.raises(ScanError, match=sentence) as caught:
        read_scan(path)
    assert str(caught.value).startswith(f"{path}: ")
    assert "\n" not in str(caught.value)


def test_the_default_entry_is_taken_of_two(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        file.copy("entry", "another")
        stored(file, "another/title", "of another detector")
        file.attrs["default"] = "another"
    assert read_scan(path).title == "of another detector"


def test_text_that_is_not_utf8_is_read_as_latin_1(path: Path) -> None:
    assert plain(b"\xb5m") == "µm"
    assert plain("\udcb5m") == "µm"
    assert plain("µm".encode()) == "µm"
    with h5py.File(path, "r+") as file:
        file[f"{DETECTOR}/x_pixel_size"].attrs["units"] = np.bytes_(b"\xb5m")
        file[f"{DETECTOR}/y_pixel_size"].attrs["units"] = np.bytes_(b"k\xb5")
    with pytest.raises(FileFormatError, match="y_pixel_size has units 'kµ', which"):
        read_scan(path)


def counted(scan: Scan, change: Callable[[Any], Any], limit: int | None = None) -> Scan:
    """The scan with its counts changed."""
    made = scan.with_counts(change(scan.counts.read(range(scan.shape[0])).copy()))
    return made if limit is None else replace(made, count_limit=limit)


def test_the_check_says_what_is_wrong_with_the_counts(scan: Scan) -> None:
    cases = [
        (
            counted(scan, lambda c: np.minimum(c, 255), 255),
            "the counts of the open exposures stand at the limit of the counter or of",
        ),
        (
            counted(scan, lambda c: np.full_like(c, 2**32 - 1)),
            "the open exposures hold negative numbers, NaN or fractions where counts",
        ),
        (counted(scan, lambda c: 0 * c), "no open exposure counts anything"),
        (
            counted(scan, lambda c: 0 * c + 1000),
            "every open exposure has a problem of its own, as exposure 2: its counts",
        ),
        (
            counted(scan, lambda c: c[:, [0, 2, 1, 3]]),
            "the threshold at 45 keV counts more than the one at 32 keV: are they in the right order, and are these counts above",
        ),
        (
            replace(scan, pixel_mask=np.ones((6, 8), np.uint32)),
            "100% of the pixels are bad; of most, the scan's own pixel mask excludes",
        ),
        (
            replace(scan, thickness_mm=0.0 * scan.thickness_mm),
            "no usable wedge exposure holds PMMA or Al; add some",
        ),
        (
            replace(scan, thickness_mm=scan.thickness_mm * [1.0, 0.0]),
            "no usable wedge exposure holds Al; add some",
        ),
    ]
    for made, sentence in cases:
        found = check_scan(made)
        assert found.verdict is Verdict.NOT_FIT
        assert found.causes[0].startswith(sentence), found.causes


def test_copies_of_one_step_are_too_few(scan: Scan) -> None:
    def copied(counts: Any) -> Any:
        steps = scan.exposures("wedge")
        counts[steps] = counts[steps[0]]
        return counts

    found = check_scan(counted(scan, copied))
    assert found.causes == ("1 usable wedge exposures are too few for 2 materials",)


def test_what_is_known_beforehand_rules_a_scan_out(scan: Scan) -> None:
    assert check_scan(scan).verdict is not Verdict.NOT_FIT
    found = check_scan(scan, known=("its sensor is of cheese",))
    assert found.verdict is Verdict.NOT_FIT
    assert found.causes == ("its sensor is of cheese",)


def layers(*named: tuple[str, str, float]) -> tuple[Layer, ...]:
    return tuple(Layer(name=n, formula=f, density_g_cm3=d) for n, f, d in named)


PLASTICS = layers(
    ("PMMA", "C5H8O2", 1.19), ("polyethylene", "C2H4", 0.94), ("water", "H2O", 1.0)
)
MODEL_FAULTS: list[tuple[dict[str, Any], str]] = [
    ({"target_material": "Ag"}, "target_material is 'Ag'; the tube model knows"),
    ({"voltage_kv": 200.0}, "voltage is 200 kV; the tube model goes from 20 to 160"),
    ({"voltage_kv": 10.0}, "voltage is 10 kV; the tube model goes from 20 to 160"),
    (
        {"voltage_kv": 57.0},
        "threshold_energy 58 keV is not below the tube's voltage, 57 kV, so no photon",
    ),
    ({"sensor_material": None}, "sensor_material and sensor_thickness are needed"),
    ({"sensor_material": "cheese"}, "sensor_material: 'cheese' is neither a chem"),
    ({"sensor_thickness_mm": 1000.0}, "sensor_thickness is 1000 mm; sensors have 0.01"),
    ({"pixel_size_um": None}, "x_pixel_size and y_pixel_size are needed"),
    ({"pixel_size_um": (0.1, 100.0)}, "x_pixel_size and y_pixel_size are 100 and 0.1"),
    (
        {"filters": (Filter(material="Xy", thickness_mm=1.0),)},
        "material of filter 1: 'Xy' is neither a chemical formula nor a known",
    ),
    (
        {"filters": (Filter(material="Cu", thickness_mm=1000.0),)},
        r"the filters \(Cu 1000 mm\) let through less than 1e-06 of any photon",
    ),
    (
        {"materials": layers(("glue", "C5(H8", 1.0), ("Al", "Al", 2.7))},
        r"formula of glue: 'C5\(H8' is neither a chemical formula nor a known",
    ),
    (
        {"materials": PLASTICS, "thickness_mm": np.zeros((17, 3))},
        "PMMA attenuates like polyethylene and water to .*, so counts cannot tell them",
    ),
    (
        {
            "thresholds_kev": np.array([20.0]),
            "counts": CountsInMemory(np.ones((17, 1, 6, 8), np.uint32)),
        },
        "1 thresholds cannot tell 2 materials apart; as many thresholds as materials",
    ),
]


@pytest.mark.parametrize(("facts", "sentence"), MODEL_FAULTS)
def test_what_the_model_cannot_take_names_file_and_field(
    scan: Scan, facts: dict[str, Any], sentence: str
) -> None:
    with pytest.raises(ScanError, match=sentence) as caught:
        Setup.from_scan(replace(scan, **facts))
    assert str(caught.value).startswith(f"{scan.source}: ")


def test_what_can_be_told_apart_is_let_through(scan: Scan) -> None:
    iodine = layers(("PMMA", "C5H8O2", 1.19), ("Al", "Al", 2.7), ("I", "I", 4.93))
    assert scan_faults(scan) == ()
    three = replace(scan, materials=iodine, thickness_mm=np.zeros((17, 3)))
    assert scan_faults(three) == ()


def test_a_sensor_without_tabulated_noise_is_an_assumption(scan: Scan) -> None:
    setup = Setup.from_scan(replace(scan, sensor_material="Ge"))
    assert "pair energy and Fano factor of Ge are taken as CdTe's" in setup.assumptions
    silicon = Setup.from_scan(replace(scan, sensor_material="silicon"))
    assert silicon.assumptions == ()
    assert silicon.sensor.material == "Si"


def test_the_calibrator_says_what_is_wrong_with_the_opens(scan: Scan) -> None:
    same = counted(scan, lambda c: 0 * c + 1000)
    with pytest.raises(CalibrationError, match=r"every open .* exposure 2: its counts"):
        WedgeCalibrator().fit(same)


@pytest.mark.parametrize("exposure", [-1, 17])
def test_leaving_out_what_is_not_there_is_refused(scan: Scan, exposure: int) -> None:
    with pytest.raises(
        InputError, match=f"exposure {exposure} cannot be left out; exp"
    ):
        WedgeCalibrator(excluded=(exposure,)).fit(scan)


def test_steps_in_one_proportion_are_refused(scan: Scan) -> None:
    thickness = scan.thickness_mm.copy()
    steps = scan.exposures("wedge")
    thickness[steps] = np.arange(1.0, len(steps) + 1)[:, None] * [5.0, 0.5]
    made = replace(scan, thickness_mm=thickness)
    with pytest.raises(CalibrationError, match="PMMA and Al in one fixed proportion"):
        wedge_data(made, np.zeros((6, 8), bool))


@pytest.mark.parametrize(
    ("raised", "sentence"),
    [
        (CalibrationError("no flux"), r"^scan in memory: no flux$"),
        (ScanError("scan in memory: no flux"), r"^scan in memory: no flux$"),
        (np.linalg.LinAlgError("singular"), r"^scan in memory: the open and wedge ex"),
    ],
)
def test_an_error_without_a_file_gets_one(
    scan: Scan, raised: Exception, sentence: str
) -> None:
    with pytest.raises((CalibrationError, ScanError), match=sentence), told_of(scan):
        raise raised
