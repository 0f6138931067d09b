"""Threshold scans and threshold energies in files: what comes back, what is refused."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import h5py
import numpy as np
import pytest

from spectral.errors import FileFormatError, InputError, ScanError
from spectral.scans.scan import Filter
from spectral.scans.threshold_scan import LineSource, ThresholdScan
from spectral.scans.threshold_scan_file import (
    read_threshold_scan,
    write_threshold_scan,
)

if TYPE_CHECKING:
    from pathlib import Path

CHANNEL = "entry/instrument/detector/threshold_1_channel"


@pytest.fixture
def scan() -> ThresholdScan:
    rng = np.random.default_rng(3)
    return ThresholdScan(
        settings=np.arange(40.0, 60.0, 2.0),
        counts=rng.integers(0, 9000, (10, 2, 3, 4)).astype(np.uint32),
        count_time_s=np.full(10, 0.5),
        source=LineSource(
            kind="edge filter",
            emitter="Gd",
            voltage_kv=80.0,
            filters=(
                Filter(material="Al", thickness_mm=2.0),
                Filter(material="Gd", thickness_mm=0.1),
            ),
        ),
        pixel_mask=np.array([[0, 0, 2, 0]] * 3, np.uint32),
        sensor_material="CdTe",
        sensor_thickness_mm=1.0,
        pixel_size_um=(100.0, 110.0),
        nominal_scale=(-4.0, 0.25),
        title="a title",
        start_time="2030-01-02T03:04:05",
    )


def test_what_was_written_comes_back(scan: ThresholdScan, tmp_path: Path) -> None:
    write_threshold_scan(scan, tmp_path / "scan.h5")
    back = read_threshold_scan(tmp_path / "scan.h5")
    for name in ("settings", "counts", "count_time_s", "pixel_mask"):
        assert np.array_equal(getattr(back, name), getattr(scan, name)), name
    for name in ("source", "sensor_material", "sensor_thickness_mm", "pixel_size_um"):
        assert getattr(back, name) == getattr(scan, name), name
    assert back.nominal_scale == scan.nominal_scale
    assert (back.title, back.start_time) == (scan.title, scan.start_time)
    assert len(back.digest) == 64


@pytest.mark.parametrize(
    "source",
    [
        LineSource(kind="fluorescence target", emitter="Sn"),
        LineSource(kind="radionuclide", emitter="Am-241"),
        LineSource(kind="tube end", voltage_kv=60.0),
    ],
)
def test_every_kind_of_source(
    scan: ThresholdScan, source: LineSource, tmp_path: Path
) -> None:
    bare = replace(
        scan,
        source=source,
        sensor_material=None,
        sensor_thickness_mm=None,
        pixel_size_um=None,
        nominal_scale=None,
    )
    write_threshold_scan(bare, tmp_path / "scan.h5")
    back = read_threshold_scan(tmp_path / "scan.h5")
    assert back.source == source
    assert back.sensor_material is None
    assert back.nominal_scale is None


def test_what_is_no_threshold_scan(scan: ThresholdScan, tmp_path: Path) -> None:
    path = tmp_path / "scan.h5"
    with h5py.File(path, "w") as file:
        file["something"] = 1
    with pytest.raises(FileFormatError, match="this is no threshold scan"):
        read_threshold_scan(path)
    write_threshold_scan(scan, path)
    with h5py.File(path, "a") as file:
        for k in (1, 2):
            del file[f"entry/instrument/detector/threshold_{k}_channel"][
                "threshold_setting"
            ]
    with pytest.raises(FileFormatError, match="a threshold scan needs one"):
        read_threshold_scan(path)


@pytest.mark.parametrize(
    ("field", "value", "match"),
    [
        (f"{CHANNEL}/data", np.zeros((9, 3, 4), np.uint32), "10 settings need"),
        (f"{CHANNEL}/data", np.full((10, 3, 4), -1), "negative counts"),
        (f"{CHANNEL}/threshold_setting", np.arange(10.0), "differs from the first"),
        (f"{CHANNEL}/nominal_scale", np.array([1.0, 0.0]), "must be two numbers"),
        ("entry/sample/role", "magic", "source kind 'magic' is unknown"),
        (
            "entry/instrument/detector/pixel_mask",
            np.zeros((2, 2), np.uint32),
            "the pixels need",
        ),
    ],
)
def test_what_cannot_be(
    scan: ThresholdScan, tmp_path: Path, field: str, value: object, match: str
) -> None:
    path = tmp_path / "scan.h5"
    write_threshold_scan(scan, path)
    with h5py.File(path, "a") as file:
        del file[field]
        file[field] = value
    with pytest.raises((FileFormatError, ScanError), match=match):
        read_threshold_scan(path)


def test_count_time_of_the_wrong_length(scan: ThresholdScan, tmp_path: Path) -> None:
    path = tmp_path / "scan.h5"
    write_threshold_scan(scan, path)
    name = "entry/instrument/detector/count_time"
    with h5py.File(path, "a") as file:
        del file[name]
        file[name] = np.ones(3)
        file[name].attrs["units"] = "s"
    with pytest.raises(FileFormatError, match="the settings need"):
        read_threshold_scan(path)
    with h5py.File(path, "a") as file:
        del file[name]
        file[name] = 0.25
        file[name].attrs["units"] = "s"
    assert np.all(read_threshold_scan(path).count_time_s == 0.25)


def test_settings_must_go_one_way(scan: ThresholdScan) -> None:
    settings = scan.settings.copy()
    settings[3] = settings[5]
    with pytest.raises(ScanError, match="rise or fall steadily"):
        replace(scan, settings=settings)
    with pytest.raises(InputError, match="the counts need"):
        replace(scan, settings=settings[:4])
    with pytest.raises(ScanError, match="count_time_s must be more than zero"):
        replace(scan, count_time_s=np.zeros(10))


def test_sources_that_cannot_be() -> None:
    with pytest.raises(InputError, match="takes an emitter"):
        LineSource(kind="radionuclide")
    with pytest.raises(InputError, match="takes no emitter"):
        LineSource(kind="tube end", emitter="W", voltage_kv=60.0)
    with pytest.raises(InputError, match="needs the tube's voltage_kv"):
        LineSource(kind="edge filter", emitter="Gd")
