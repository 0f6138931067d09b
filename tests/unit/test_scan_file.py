"""The scan file: what is read, how it is converted, and every sentence it stops with."""

from __future__ import annotations

import hashlib
import threading
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np
import pytest

from spectral.errors import FileFormatError, InputError, ScanError
from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan
from spectral.scans.scan_file import read_scan, write_scan
from spectral.scans.stored_counts import NOT_A_COUNT, as_counts, counter_stop

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

ROLE = ("dark", "open", "wedge", "wedge", "object")
DETECTOR = "entry/instrument/detector"


def make_scan(rng: np.random.Generator) -> Scan:
    counts = rng.poisson(
        np.array([900.0, 500.0, 90.0])[None, :, None, None], (5, 3, 4, 6)
    ).astype(np.uint32)
    counts[0] = 0
    thickness = np.array([[0, 0], [0, 0], [5, 0.5], [10, 0], [np.nan, np.nan]])
    return Scan(
        counts=CountsInMemory(counts),
        thresholds_kev=np.array([20.0, 35.0, 60.0]),
        role=ROLE,
        thickness_mm=thickness.astype(float),
        materials=(
            Layer(name="PE", formula="C2H4", density_g_cm3=0.94),
            Layer(name="Al", formula="Al", density_g_cm3=2.7),
        ),
        count_time_s=np.array([1.0, 0.5, 0.5, 0.5, 0.5]),
        current_ma=np.array([0.0, 2.0, 2.0, 2.0, 2.0]),
        voltage_kv=80.0,
        filters=(Filter(material="Al", thickness_mm=2.0),),
        sensor_material="CdTe",
        sensor_thickness_mm=1.0,
        pixel_size_um=(100.0, 110.0),
        pixel_mask=np.eye(4, 6, dtype=np.uint32),
        rotation_angle_deg=np.arange(0.0, 50.0, 10.0),
        title="made for a test",
        start_time="2026-01-05T08:00:00+00:00",
    )


@pytest.fixture
def scan() -> Scan:
    return make_scan(np.random.default_rng(1))


@pytest.fixture
def path(scan: Scan, tmp_path: Path) -> Path:
    write_scan(scan, tmp_path / "scan.h5")
    return tmp_path / "scan.h5"


def test_what_was_written_comes_back(scan: Scan, path: Path) -> None:
    back = read_scan(path)
    everything = range(5)
    assert np.array_equal(back.counts.read(everything), scan.counts.read(everything))
    for name in (
        "role",
        "materials",
        "voltage_kv",
        "filters",
        "sensor_material",
        "sensor_thickness_mm",
        "pixel_size_um",
        "target_material",
        "title",
        "start_time",
    ):
        assert getattr(back, name) == getattr(scan, name), name
    for name in (
        "thresholds_kev",
        "thickness_mm",
        "count_time_s",
        "current_ma",
        "pixel_mask",
        "rotation_angle_deg",
    ):
        assert np.array_equal(
            getattr(back, name), getattr(scan, name), equal_nan=True
        ), name
    assert back.notes == ()
    assert back.source == str(path)
    assert back.digest == hashlib.sha256(path.read_bytes()).hexdigest()


def test_exposures_are_read_in_the_order_asked(scan: Scan, path: Path) -> None:
    asked = [4, 0, 0, 3, 2]
    back = read_scan(path).counts.read(asked)
    assert back.dtype == np.uint32
    assert np.array_equal(back, scan.counts.read(asked))


def test_threads_may_read_at_once(scan: Scan, path: Path) -> None:
    back = read_scan(path)
    wanted = scan.counts.read(range(5))
    right: list[bool] = []

    def read() -> None:
        seen = [back.counts.read(range(5)) for _ in range(5)]
        right.extend(bool(np.array_equal(counts, wanted)) for counts in seen)

    threads = [threading.Thread(target=read) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert right == [True] * 20


def test_channels_go_by_energy_not_by_name(scan: Scan, path: Path) -> None:
    with h5py.File(path, "r+") as file:
        file.move(f"{DETECTOR}/threshold_1_channel", f"{DETECTOR}/z_first")
        file.move(f"{DETECTOR}/threshold_3_channel", f"{DETECTOR}/a_last")
    back = read_scan(path)
    assert back.thresholds_kev.tolist() == [20.0, 35.0, 60.0]
    assert np.array_equal(back.counts.read([2]), scan.counts.read([2]))


@pytest.mark.parametrize(
    ("field", "stored", "unit", "name", "wanted"),
    [
        ("source/voltage", 80e3, "V", "voltage_kv", 80.0),
        ("source/current", np.full(5, 1500.0), "uA", "current_ma", np.full(5, 1.5)),
        ("source/current", np.full(5, 0.002), "A", "current_ma", np.full(5, 2.0)),
        (
            "detector/count_time",
            np.full(5, 250.0),
            "ms",
            "count_time_s",
            np.full(5, 0.25),
        ),
        ("detector/count_time", 0.25, "s", "count_time_s", np.full(5, 0.25)),
        ("detector/sensor_thickness", 750.0, "um", "sensor_thickness_mm", 0.75),
        ("detector/sensor_thickness", 0.1, "cm", "sensor_thickness_mm", 1.0),
    ],
)
def test_units_are_converted(
    path: Path, field: str, stored: Any, unit: str, name: str, wanted: Any
) -> None:
    with h5py.File(path, "r+") as file:
        del file["entry/instrument"][field]
        file["entry/instrument"][field] = stored
        file["entry/instrument"][field].attrs["units"] = unit
    assert np.allclose(getattr(read_scan(path), name), wanted, rtol=1e-14)


def test_sample_and_pixel_units_are_converted(scan: Scan, path: Path) -> None:
    with h5py.File(path, "r+") as file:
        sample = file["entry/sample"]
        for name, factor, unit in (
            ("density", 1000.0, "kg/m3"),
            ("thickness", 1e-3, "m"),
            ("rotation_angle", np.pi / 180, "rad"),
        ):
            sample[name][...] = sample[name][...] * factor
            sample[name].attrs["units"] = unit
        detector = file[DETECTOR]
        detector["x_pixel_size"][...] = 110e-6
        detector["x_pixel_size"].attrs["units"] = "m"
        threshold = detector["threshold_2_channel/threshold_energy"]
        threshold[...] = 35000.0
        threshold.attrs["units"] = "eV"
    back = read_scan(path)
    assert [m.density_g_cm3 for m in back.materials] == pytest.approx([0.94, 2.7])
    assert np.allclose(back.thickness_mm, scan.thickness_mm, equal_nan=True)
    assert back.rotation_angle_deg is not None
    assert np.allclose(back.rotation_angle_deg, [0, 10, 20, 30, 40])
    assert back.pixel_size_um == pytest.approx((100.0, 110.0))
    assert back.thresholds_kev[1] == pytest.approx(35.0)


def test_absent_optional_fields_are_said(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        for name in (
            "source/current",
            "filter_1",
            "detector/sensor_material",
            "detector/x_pixel_size",
            "detector/pixel_mask",
        ):
            del file["entry/instrument"][name]
        del file["entry/sample/rotation_angle"]
    back = read_scan(path)
    assert back.current_ma is None
    assert back.filters == ()
    assert back.sensor_material is None
    assert back.pixel_size_um is None
    assert back.rotation_angle_deg is None
    assert not back.pixel_mask.any()
    said = " ".join(back.notes)
    for word in ("current", "filter", "sensor", "pixel size", "pixel mask"):
        assert word in said


def _set(file: h5py.File, name: str, value: Any, unit: str = "") -> None:
    if name in file:
        del file[name]
    if isinstance(value, list) and value and isinstance(value[0], str):
        file.create_dataset(name, data=value, dtype=h5py.string_dtype())
    else:
        file[name] = value
    if unit:
        file[name].attrs["units"] = unit


def _drop_units(file: h5py.File, name: str) -> None:
    del file[name].attrs["units"]


FAULTS: list[tuple[Callable[[h5py.File], object], str]] = [
    (lambda f: f.__delitem__(f"{DETECTOR}/count_time"), "count_time is missing"),
    (lambda f: f.__delitem__("entry/sample/role"), "sample/role is missing"),
    (lambda f: f.__delitem__("entry/sample"), "no group with NX_class 'NXsample'"),
    (lambda f: f.__delitem__("entry/instrument/source/voltage"), "voltage is missing"),
    (
        lambda f: f.__delitem__(f"{DETECTOR}/threshold_2_channel/data"),
        "threshold_2_channel/data is missing",
    ),
    (lambda f: _drop_units(f, f"{DETECTOR}/count_time"), "count_time has no units"),
    (
        lambda f: f[f"{DETECTOR}/count_time"].attrs.__setitem__("units", "fortnight"),
        "count_time has units 'fortnight', which cannot be turned into s",
    ),
    (
        lambda f: f["entry/sample/thickness"].attrs.__setitem__("units", "g/cm2"),
        "thickness has units 'g/cm2', which cannot be turned into mm",
    ),
    (
        lambda f: _set(f, f"{DETECTOR}/count_time", np.ones(4), "s"),
        r"count_time has shape \(4,\), the counts need \(5,\)",
    ),
    (
        lambda f: _set(f, f"{DETECTOR}/count_time", np.array([1, 1, 0, 1, 1.0]), "s"),
        "count_time is 0 s in exposure 2; it must be more than zero",
    ),
    (
        lambda f: _set(f, "entry/instrument/source/current", -np.ones(5), "mA"),
        "current is -1 mA in exposure 0; it must be zero or more",
    ),
    (
        lambda f: _set(
            f, "entry/instrument/source/voltage", np.array([80.0, 90]), "kV"
        ),
        "voltage changes within the scan",
    ),
    (
        lambda f: _set(f, "entry/instrument/source/voltage", -3.0, "kV"),
        "voltage must be a positive number of kV",
    ),
    (
        lambda f: _set(f, "entry/instrument/source/voltage", "high", "kV"),
        "voltage must hold numbers",
    ),
    (lambda f: _set(f, "entry/sample/role", [*ROLE[:4]]), "role has 4 entries"),
    (
        lambda f: _set(f, "entry/sample/role", [*ROLE[:4], "flat"]),
        "role of exposure 4 is 'flat'; it must be one of dark, open, wedge, object",
    ),
    (lambda f: _set(f, "entry/sample/role", np.ones(5)), "role must hold text"),
    (
        lambda f: _set(f, "entry/sample/formula", ["C2H4"]),
        "formula has 1 entries, there are 2 materials",
    ),
    (
        lambda f: _set(f, "entry/sample/density", np.array([1.0, 0.0]), "g/cm3"),
        "density of Al is 0 g/cm3; it must be more than zero and less than 25",
    ),
    (
        lambda f: _set(f, "entry/sample/material", ["Al", "Al"]),
        "material names Al twice",
    ),
    (
        lambda f: _set(f, "entry/sample/thickness", np.ones((5, 3)), "mm"),
        r"thickness has shape \(5, 3\); 5 exposures and 2 materials need \(5, 2\)",
    ),
    (
        lambda f: f["entry/sample/thickness"].__setitem__((2, 1), np.nan),
        r"thickness of Al in exposure 2 \(wedge\) is nan mm",
    ),
    (
        lambda f: f["entry/sample/thickness"].__setitem__((3, 0), -1.0),
        r"thickness of PE in exposure 3 \(wedge\) is -1 mm",
    ),
    (
        lambda f: f[f"{DETECTOR}/threshold_2_channel/threshold_energy"].__setitem__(
            (), 20.0
        ),
        "both have threshold_energy 20 keV",
    ),
    (
        lambda f: _set(
            f, f"{DETECTOR}/threshold_2_channel/data", np.ones((5, 4, 5), np.uint32)
        ),
        r"threshold_2_channel/data has shape \(5, 4, 5\), but",
    ),
    (
        lambda f: _set(
            f, f"{DETECTOR}/threshold_1_channel/data", np.ones((4, 5), np.uint32)
        ),
        r"counts need \(exposure, row, column\)",
    ),
    (
        lambda f: _set(
            f, f"{DETECTOR}/threshold_1_channel/data", np.full((5, 4, 6), 0.5)
        ),
        "holds fractions",
    ),
    (
        lambda f: _set(f, f"{DETECTOR}/pixel_mask", np.zeros((6, 4), np.uint32)),
        r"pixel_mask has shape \(6, 4\)",
    ),
    (
        lambda f: _set(f, "entry/sample/rotation_angle", np.zeros(3), "deg"),
        r"rotation_angle has shape \(3,\)",
    ),
    (
        lambda f: [
            f[f"{DETECTOR}/threshold_{k}_channel"].attrs.__setitem__("NX_class", "x")
            for k in (1, 2, 3)
        ],
        "holds no group with NX_class 'NXdetector_channel'",
    ),
    (lambda f: f["entry"].attrs.__delitem__("NX_class"), "so this is not a scan"),
]


@pytest.mark.parametrize(("spoil", "sentence"), FAULTS)
def test_every_fault_is_one_sentence(
    path: Path, spoil: Callable[[h5py.File], object], sentence: str
) -> None:
    with h5py.File(path, "r+") as file:
        spoil(file)
    with pytest.raises(ScanError, match=sentence) as caught:
        read_scan(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_files_that_are_no_scan(path: Path, tmp_path: Path) -> None:
    with pytest.raises(FileFormatError, match="no such file"):
        read_scan(tmp_path / "absent.h5")
    text = tmp_path / "text.h5"
    text.write_text("not a scan")
    with pytest.raises(FileFormatError, match="not an HDF5 file"):
        read_scan(text)
    cut = tmp_path / "cut.h5"
    cut.write_bytes(path.read_bytes()[:-2000])
    with pytest.raises(FileFormatError, match="truncated; copy it again"):
        read_scan(cut)


def test_damage_met_later_is_said(path: Path) -> None:
    back = read_scan(path)
    with h5py.File(path, "r+") as file:
        del file[f"{DETECTOR}/threshold_2_channel/data"]
    with pytest.raises(FileFormatError, match="damaged or has changed since"):
        back.counts.read([1])


def test_an_interrupted_write_leaves_no_file(scan: Scan, tmp_path: Path) -> None:
    class Broken:
        shape = scan.shape

        def read(self, exposures: Any) -> Any:
            if list(exposures) == [3]:
                raise KeyboardInterrupt
            return scan.counts.read(exposures)

    with pytest.raises(KeyboardInterrupt):
        write_scan(replace(scan, counts=Broken()), tmp_path / "scan.h5")
    assert list(tmp_path.iterdir()) == []


def test_numbers_that_are_no_counts_stay_faults(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        counts = file[f"{DETECTOR}/threshold_1_channel/data"][...].astype(np.float64)
        counts[1, 0, :4] = [-1, np.nan, 7.5, 1e12]
        _set(file, f"{DETECTOR}/threshold_1_channel/data", counts)
    back = read_scan(path)
    assert back.count_limit == NOT_A_COUNT
    assert back.counts.read([1])[0, 0, 0, :4].tolist() == [NOT_A_COUNT] * 4
    assert np.array_equal(back.counts.read([2])[0, 0], counts[2])


@pytest.mark.parametrize("kind", [np.int16, np.int32, np.int64, np.uint64])
def test_signed_and_long_integers(kind: type[np.integer[Any]]) -> None:
    raw = np.array([0, 5, 30000], kind)
    assert as_counts(raw).tolist() == [0, 5, 30000]
    if np.iinfo(kind).min < 0:
        assert as_counts(-raw).tolist() == [0, NOT_A_COUNT, NOT_A_COUNT]


def test_the_stored_integers_maximum_is_the_limit(scan: Scan, tmp_path: Path) -> None:
    write_scan(replace(scan, count_limit=65535), tmp_path / "short.h5")
    with h5py.File(tmp_path / "short.h5") as file:
        assert file[f"{DETECTOR}/threshold_1_channel/data"].dtype == np.uint16
    assert read_scan(tmp_path / "short.h5").count_limit == 65535


@pytest.mark.parametrize("bits", [8, 12, 20])
def test_a_counters_own_stop_is_found(bits: int) -> None:
    rng = np.random.default_rng(bits)
    top = 2**bits - 1
    counts = rng.poisson(0.9 * top, 20_000).astype(np.uint32)
    counts[:40] = top
    counts = np.minimum(counts, top)
    assert counter_stop(counts, storage=NOT_A_COUNT) == top


def test_chance_makes_no_stop() -> None:
    rng = np.random.default_rng(5)
    for _ in range(50):
        counts = np.minimum(rng.poisson(235.0, 3000), 255).astype(np.uint32)
        counts = counts[counts < 255]
        counts = np.append(counts, np.full(3, 255, np.uint32))
        assert counter_stop(counts, storage=NOT_A_COUNT) == NOT_A_COUNT
    assert counter_stop(np.full(99, 1000, np.uint32), storage=65535) == 65535
    assert counter_stop(np.full(9, NOT_A_COUNT, np.uint32), storage=7) == 7


def test_lengths_in_memory_are_checked(scan: Scan) -> None:
    with pytest.raises(InputError, match="count_time_s has shape"):
        replace(scan, count_time_s=np.ones(3))
