"""A calibration survives its file, and only its own kind of file is read."""

from __future__ import annotations

from dataclasses import fields, is_dataclass, replace
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np
import pytest

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.residual import fit_residual
from spectral.calibration.result import Calibration, Promise, StepTable
from spectral.errors import FileFormatError
from spectral.forward.counting_model import CountingModel
from spectral.physics.materials import find_material
from spectral.physics.pileup import PulseShape
from spectral.scans.scan import Layer
from spectral.scans.scan_file import file_digest

if TYPE_CHECKING:
    from pathlib import Path

LEVELS_KEV = np.array([20.0, 32.0, 45.0, 60.0])


def counting_model() -> CountingModel:
    """A made-up sensor, a photopeak with a flat tail, behind a made-up tube."""
    energy = np.arange(12.0, 91.0, 2.0)
    materials = (find_material("C5H8O2", density_g_cm3=1.19), find_material("Al"))
    attenuation = np.array([m.mass_attenuation(energy) for m in materials])
    spectrum = (energy - 8.0) * (92.0 - energy) * np.exp(-0.7 * attenuation[1])
    level = 0.5 * np.arange(316)
    peak = np.exp(-0.5 * ((level - energy[:, None]) / 1.0) ** 2)
    tail = (level > 4.0) & (level < energy[:, None])
    heights = 0.7 * peak / peak.sum(axis=1, keepdims=True)
    heights += 0.5 * tail / tail.sum(axis=1, keepdims=True)
    return CountingModel(
        energy_kev=energy,
        spectrum=spectrum / spectrum.sum(),
        attenuation=attenuation,
        heights=heights,
        step_kev=0.5,
        noise_kev=1.6,
        shape=PulseShape(dead_time_ns=150.0, tail_ns=30.0),
    )


def calibration(pixels: tuple[int, int] = (6, 8)) -> Calibration:
    """A calibration of made-up pixels, as a wedge scan might have left it."""
    rng = np.random.default_rng(1)
    mesh = np.meshgrid([0.0, 3.0, 6.0, 9.0], [0.0, 1.0, 2.0, 3.0], indexing="ij")
    areal = np.stack([m.ravel() for m in mesh], axis=1)
    steps, bins = areal.shape[0], LEVELS_KEV.size
    ratio = np.zeros((steps, bins))
    error = np.full((steps, bins), 1e-4)
    current = np.full(steps, 4.0)
    residual = fit_residual(ratio, error, areal, current, np.array([0.2, 0.4]))
    size = bins + 3
    scale = np.array([0.02, *[0.5] * bins, 0.2, 0.05])
    return Calibration(
        materials=(
            Layer(name="PMMA", formula="C5H8O2", density_g_cm3=1.19),
            Layer(name="Al", formula="Al", density_g_cm3=2.7),
        ),
        thresholds_kev=LEVELS_KEV - 0.5,
        levels_kev=LEVELS_KEV,
        model=counting_model(),
        photons_per_mas=1e5,
        residual=residual,
        departures=rng.normal(0.0, 1.0, (*pixels, size)) * scale,
        departure_covariance=np.tile(
            np.diag(0.01 * scale**2).astype(np.float32), (*pixels, 1, 1)
        ),
        spread=np.diag(scale**2),
        pixel_reasons=np.zeros(pixels, np.uint16),
        deviance=np.ones(pixels, np.float32),
        steps=StepTable(
            exposure=np.arange(steps),
            areal_density=areal,
            current_ma=current,
            count_time_s=np.full(steps, 0.25),
            drift=np.zeros(steps),
            residual=ratio,
            physics_residual=ratio,
            error=error,
        ),
        promise=None,
        unknowns={"ln_noise": 0.47, "ln_dead_time": 5.0},
        unknown_errors={"ln_noise": 0.01, "ln_dead_time": 0.02},
        voltage_kv=90.0,
        sensor="CdTe, 1 mm, 100 um pixels",
        filters=("Al 2 mm",),
        assumptions=("no tube current is given",),
        findings=(),
        scan_source="a made-up wedge scan",
        scan_digest="0" * 64,
        created="2026-01-01T00:00:00+00:00",
        version="0",
        cross_sections="made up",
    )


@pytest.fixture
def path(tmp_path: Path) -> Path:
    """A calibration in a file."""
    path = tmp_path / "calibration.h5"
    write_calibration(calibration(), path)
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


def test_everything_comes_back(path: Path) -> None:
    assert_alike(calibration(), read_calibration(path), "calibration")


def test_large_arrays_and_a_promise_come_back(tmp_path: Path) -> None:
    promise = Promise(
        exposure=np.array([3, 4]),
        bias=np.array([[0.01, -0.02], [0.0, 0.03]]),
        single_error=np.full((2, 2), 0.1),
        fixed_pattern=np.array([0.2, 0.3]),
    )
    full = replace(
        calibration((40, 50)), promise=promise, findings=("a finding", "another")
    )
    path = tmp_path / "large.h5"
    write_calibration(full, path)
    assert_alike(full, read_calibration(path), "calibration")


def test_digest_is_that_of_the_file(path: Path) -> None:
    assert read_calibration(path).digest == file_digest(path)


def test_expected_counts_survive_the_file(path: Path) -> None:
    areal = np.array([[2.0, 0.5], [7.0, 2.0]])
    arguments = (areal, np.full(2, 4.0), np.ones(2), np.arange(10))
    np.testing.assert_array_equal(
        read_calibration(path).expected_bins(*arguments),
        calibration().expected_bins(*arguments),
    )


def test_units_stand_beside_the_numbers(path: Path) -> None:
    with h5py.File(path) as file:
        assert file["levels_kev"].attrs["units"] == "keV"
        assert file["model/attenuation"].attrs["units"] == "cm2/g"
        assert file["steps/areal_density"].attrs["units"] == "g/cm2"


def test_nothing_else_is_left_in_the_folder(path: Path) -> None:
    write_calibration(calibration(), path)
    assert [p.name for p in path.parent.iterdir()] == [path.name]


def test_failed_writing_leaves_the_old_file(path: Path) -> None:
    before = path.read_bytes()
    broken = replace(calibration(), unknowns={"ln_noise": object()})  # type: ignore[dict-item]
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


def test_what_a_calibration_says_of_itself() -> None:
    found = calibration((6, 8))
    assert found.shape == (6, 8)
    assert found.good.all()
    assert found.largest.tolist() == [9.0, 3.0]
    assert found.largest_current_ma == 4.0
    assert found.dead_time_ns == pytest.approx(165.0)
    assert found.parameter_names[1:5] == tuple(f"shift_{k}_kev" for k in range(1, 5))
    expected = LEVELS_KEV[2] + found.departures[3, 4, 3]
    assert found.threshold_kev()[2, 3, 4] == pytest.approx(expected)
    np.testing.assert_array_equal(
        found.pixels(np.array([9])).values[0], found.departures[1, 1]
    )
