"""A calibration survives its file, and only its own kind of file is read."""

from __future__ import annotations

from dataclasses import fields, is_dataclass, replace
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np
import pytest

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.result import Promise
from spectral.errors import FileFormatError
from spectral.scans.scan_file import file_digest

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.calibration.result import Calibration


@pytest.fixture
def calibration(make_calibration: Callable[..., Calibration]) -> Calibration:
    return make_calibration()


@pytest.fixture
def path(calibration: Calibration, tmp_path: Path) -> Path:
    """A calibration in a file."""
    path = tmp_path / "calibration.h5"
    write_calibration(calibration, path)
    return path


def assert_alike(first: Any, second: Any, where: str) -> None:
    """Compare all that a calibration holds, value by value."""
    if is_dataclass(first):
        assert type(first) is type(second), where
        for field in fields(first):
            if field.name != "digest":
                name = f"{where}.{field.name}"
                assert_alike(
                    getattr(first, field.name), getattr(second, field.name), name
                )
    elif isinstance(first, np.ndarray):
        assert first.dtype == second.dtype, where
        np.testing.assert_array_equal(first, second, err_msg=where)
    elif isinstance(first, tuple):
        assert len(first) == len(second), where
        for i, (a, b) in enumerate(zip(first, second, strict=True)):
            assert_alike(a, b, f"{where}[{i}]")
    else:
        assert first == second, where


def test_everything_comes_back(calibration: Calibration, path: Path) -> None:
    assert_alike(calibration, read_calibration(path), "calibration")


def test_large_arrays_and_a_promise_come_back(
    make_calibration: Callable[..., Calibration], tmp_path: Path
) -> None:
    promise = Promise(
        exposure=np.array([3, 4]),
        bias=np.array([[0.01, -0.02], [0.0, 0.03]]),
        single_error=np.full((2, 2), 0.1),
        fixed_pattern=np.array([0.2, 0.3]),
    )
    full = replace(
        make_calibration((40, 50)), promise=promise, findings=("a finding", "another")
    )
    path = tmp_path / "large.h5"
    write_calibration(full, path)
    assert_alike(full, read_calibration(path), "calibration")


def test_digest_is_that_of_the_file(path: Path) -> None:
    assert read_calibration(path).digest == file_digest(path)


def test_expected_counts_survive_the_file(calibration: Calibration, path: Path) -> None:
    areal = np.array([[2.0, 0.5], [7.0, 2.0]])
    arguments = (areal, np.full(2, 4.0), np.ones(2), np.arange(10))
    np.testing.assert_array_equal(
        read_calibration(path).expected_bins(*arguments),
        calibration.expected_bins(*arguments),
    )


def test_units_stand_beside_the_numbers(path: Path) -> None:
    with h5py.File(path) as file:
        assert file["levels_kev"].attrs["units"] == "keV"
        assert file["model/attenuation"].attrs["units"] == "cm2/g"
        assert file["steps/areal_density"].attrs["units"] == "g/cm2"


def test_nothing_else_is_left_in_the_folder(
    calibration: Calibration, path: Path
) -> None:
    write_calibration(calibration, path)
    assert [p.name for p in path.parent.iterdir()] == [path.name]


def test_failed_writing_leaves_the_old_file(
    calibration: Calibration, path: Path
) -> None:
    before = path.read_bytes()
    broken = replace(calibration, unknowns={"ln_noise": object()})  # type: ignore[dict-item]
    with pytest.raises(TypeError, match="not JSON serializable"):
        write_calibration(broken, path)
    assert path.read_bytes() == before
    assert [p.name for p in path.parent.iterdir()] == [path.name]


def test_unknown_version_is_refused(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        file.attrs["format_version"] = 99
    with pytest.raises(FileFormatError, match="calibration format 99 is not known"):
        read_calibration(path)


def test_version_that_is_missing_is_refused(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        del file.attrs["format_version"]
    with pytest.raises(FileFormatError, match="calibration format 0 is not known"):
        read_calibration(path)


def test_truncated_file_is_refused(path: Path) -> None:
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(FileFormatError, match="the file is truncated; copy it again"):
        read_calibration(path)


def test_other_hdf5_file_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "other.h5"
    with h5py.File(path, "w") as file:
        file["data"] = np.ones(3)
    with pytest.raises(FileFormatError, match="this is not a calibration file; make"):
        read_calibration(path)


def test_file_that_is_not_hdf5_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "text.h5"
    path.write_text("threshold,counts\n20,1\n")
    with pytest.raises(FileFormatError, match="this is not an HDF5 file"):
        read_calibration(path)


def test_absent_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(FileFormatError, match="there is no such file"):
        read_calibration(tmp_path / "none.h5")


@pytest.mark.parametrize("part", ["spread", "model/heights", "residual", "steps/drift"])
def test_missing_part_is_refused(path: Path, part: str) -> None:
    with h5py.File(path, "r+") as file:
        del file[part]
    with pytest.raises(FileFormatError, match="the calibration lacks a part"):
        read_calibration(path)


@pytest.mark.parametrize("name", ["voltage_kv", "materials", "sensor"])
def test_missing_fact_is_refused(path: Path, name: str) -> None:
    with h5py.File(path, "r+") as file:
        del file.attrs[name]
    with pytest.raises(FileFormatError, match="the calibration lacks a part"):
        read_calibration(path)


def test_what_a_calibration_says_of_itself(
    make_calibration: Callable[..., Calibration],
) -> None:
    found = make_calibration((6, 8))
    assert found.shape == (6, 8)
    assert found.good.all()
    assert found.largest.tolist() == [9.0, 3.0]
    assert found.largest_current_ma == 4.0
    # 150 ns held; t exp(1 - t) is above half its peak for 2.44639 (solved by hand)
    assert found.dead_time_ns == pytest.approx(150.0 + 30.0 * 2.44639, rel=1e-5)
    assert found.parameter_names[1:5] == tuple(f"shift_{k}_kev" for k in range(1, 5))
    expected = 45.0 + found.departures[3, 4, 3]
    assert found.threshold_kev()[2, 3, 4] == pytest.approx(expected)
    np.testing.assert_array_equal(
        found.pixels(np.array([9])).values[0], found.departures[1, 1]
    )
