"""Calibration files that are damaged, and scans that are not of their setting."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np
import pytest

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.calibration_shapes import part_at_fault
from spectral.calibration.short_scan import short_scan_data
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.object_scan import chosen_exposures
from spectral.errors import FileFormatError, InputError, ScanError

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan


@pytest.fixture
def calibration(make_calibration: Callable[..., Calibration]) -> Calibration:
    return make_calibration((6, 8))


@pytest.fixture
def path(calibration: Calibration, tmp_path: Path) -> Path:
    write_calibration(calibration, tmp_path / "calibration.h5")
    return tmp_path / "calibration.h5"


@pytest.fixture
def scan(make_series: Callable[..., Scan], calibration: Calibration) -> Scan:
    return make_series(calibration, 2)


def stored(file: h5py.File, name: str, value: Any) -> None:
    del file[name]
    file[name] = value


DAMAGES: list[tuple[Callable[[h5py.File], object], str]] = [
    (
        lambda f: f.attrs.__setitem__("format_version", "one"),
        "calibration format one is not known to this version",
    ),
    (lambda f: f.attrs.__setitem__("materials", "[["), "damaged .Expecting value"),
    (lambda f: f.attrs.__setitem__("voltage_kv", "x"), "damaged .could not convert"),
    (
        lambda f: stored(f, "departures", f["departures"][:5]),
        r"damaged: departures has shape \(5, 8, 7\) and not \(6, 8, 7\); copy it again",
    ),
    (
        lambda f: stored(f, "departures", f["departures"][()] * np.nan),
        "damaged: departures holds numbers that are not finite",
    ),
    (
        lambda f: stored(f, "model/heights", np.array([b"a"])),
        "damaged: model/heights holds no numbers",
    ),
    (
        lambda f: stored(f, "residual/coefficient", np.full((5, 4), np.inf)),
        "damaged: residual/coefficient has|damaged: residual/coefficient holds",
    ),
    (
        lambda f: stored(f, "pixel_reasons", np.zeros(48, np.uint16)),
        r"damaged: pixel_reasons has shape \(48,\)",
    ),
]


@pytest.mark.parametrize(("damage", "sentence"), DAMAGES)
def test_a_damaged_calibration_is_one_sentence(
    path: Path, damage: Callable[[h5py.File], object], sentence: str
) -> None:
    with h5py.File(path, "r+") as file:
        damage(file)
    with pytest.raises(FileFormatError, match=sentence) as caught:
        read_calibration(path)
    assert str(caught.value).startswith(f"{path}: ")
    assert "\n" not in str(caught.value)


def test_a_block_that_cannot_be_unpacked_names_the_file(
    make_calibration: Callable[..., Calibration], tmp_path: Path
) -> None:
    path = tmp_path / "large.h5"
    write_calibration(make_calibration((20, 40)), path)
    with h5py.File(path, "r") as file:
        info = file["departures"].id.get_chunk_info(0)
    damaged = bytearray(path.read_bytes())
    damaged[info.byte_offset : info.byte_offset + info.size] = bytes(info.size)
    path.write_bytes(damaged)
    with pytest.raises(
        FileFormatError, match=r"the calibration is damaged .*; copy it"
    ):
        read_calibration(path)


def test_a_sound_calibration_has_no_part_at_fault(calibration: Calibration) -> None:
    assert part_at_fault(calibration) == ""


@pytest.mark.parametrize(
    ("facts", "sentence"),
    [
        ({"target_material": "Mo"}, "has the target Mo and not W"),
        ({"sensor_material": "Si"}, "has a sensor of Si and not of CdTe"),
        ({"sensor_material": "cheese"}, "has a sensor of cheese and not of CdTe"),
        (
            {"current_ma": np.array([0.0, 3, 3, 0, 3, 3, 3])},
            r"has a tube current of 0 mA in exposure 3 \(object\) and not one like 4 mA",
        ),
        (
            {"current_ma": np.array([0.0, 3e6, 3, 3, 3, 3, 3])},
            r"has a tube current of 3e\+06 mA in exposure 1 \(open\)",
        ),
    ],
)
def test_another_beam_is_refused(
    calibration: Calibration, scan: Scan, facts: dict[str, Any], sentence: str
) -> None:
    other = replace(scan, **facts)
    with pytest.raises(ScanError, match=sentence):
        MaterialDecomposer(calibration).fit(other)
    with pytest.raises(ScanError, match=sentence):
        short_scan_data(calibration, other, np.ones((6, 8), bool), roles=("open",))


def test_it_says_why_no_pixel_is_sound(calibration: Calibration, scan: Scan) -> None:
    masked = replace(scan, pixel_mask=np.ones((6, 8), np.uint32))
    with pytest.raises(
        ScanError, match=r"no pixel is sound in .*; of most in the scan"
    ):
        MaterialDecomposer(calibration).fit(masked)


def test_opens_without_counts_name_the_scan(
    calibration: Calibration, scan: Scan
) -> None:
    counts = scan.counts.read(range(7)).copy()
    counts[1] = 0
    with pytest.raises(
        ScanError, match="scan in memory: exposure 1 holds no counts in"
    ):
        MaterialDecomposer(calibration).fit(scan.with_counts(counts))


@pytest.mark.parametrize("times", [1e-3, 1e3])
def test_opens_that_count_absurdly_are_refused(
    calibration: Calibration, scan: Scan, times: float
) -> None:
    wrong = replace(scan, count_time_s=times * scan.count_time_s)
    with pytest.raises(ScanError, match=r"^scan in memory: exposure 1 counts .* times"):
        MaterialDecomposer(calibration).fit(wrong)


def test_an_exposure_is_asked_for_once(scan: Scan) -> None:
    with pytest.raises(InputError, match="exposure 3 is asked for twice"):
        chosen_exposures(scan, [3, 4, 3])
