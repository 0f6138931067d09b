"""Scans and calibrations of made-up detectors, for tests of what is done with them."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

import hypothesis
import numpy as np
import pytest

from spectral.calibration.residual import fit_residual
from spectral.calibration.result import Calibration, StepTable
from spectral.forward.counting_model import CountingModel
from spectral.physics.materials import find_material
from spectral.physics.pileup import PulseShape
from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from types import ModuleType

    from numpy.typing import NDArray

# the same examples in every run: a failure then means a change, not a draw
hypothesis.settings.register_profile("steady", derandomize=True, deadline=None)
hypothesis.settings.load_profile("steady")

THRESHOLDS_KEV = (20.0, 32.0, 45.0, 58.0)
LEVELS_KEV = np.array([20.0, 32.0, 45.0, 60.0])
WEDGE_MM = [(p, a) for p in (0.0, 10.0, 25.0, 50.0) for a in (0.0, 1.0, 4.0)][1:]


class MakeScan(Protocol):
    """Returns a scan; `open_counts` is the mean at the lowest threshold."""

    def __call__(
        self,
        *,
        seed: int = 1,
        pixels: tuple[int, int] = (32, 40),
        open_counts: float = 20_000.0,
        opens: int = 4,
        darks: int = 2,
        wedge: bool = True,
        objects: int = 0,
        loss: float = 0.0,
        drift: float = 0.0,
    ) -> Scan: ...


class MakeCalibration(Protocol):
    """Returns a calibration of made-up pixels that differ a bit from each other."""

    def __call__(self, pixels: tuple[int, int] = (6, 8)) -> Calibration: ...


class MakeSeries(Protocol):
    """Returns a scan of a moving object: a dark, opens before and after, objects."""

    def __call__(
        self,
        calibration: Calibration,
        objects: int,
        *,
        seed: int = 1,
        count_time_s: float = 0.1,
        drift: float = 0.01,
    ) -> Scan: ...


def _attenuation(energy: NDArray[np.float64]) -> NDArray[np.float64]:
    """Two laws that fall with energy, in 1/mm; they resemble no material."""
    return np.array(
        [0.016 + 0.02 * (energy / 30) ** -3, 0.05 + 0.25 * (energy / 30) ** -3]
    )


def _expected(
    rng: np.random.Generator,
    thickness: NDArray[np.float64],
    beam: NDArray[np.float64],
    pixels: int,
    open_counts: float,
    loss: float,
) -> NDArray[np.float64]:
    """Mean counts in bins, shape (exposure, bin, pixel), every pixel a bit other."""
    energy = np.arange(12.0, 90.0, 3.0)
    spectrum = (energy - 9.0) * (90.0 - energy)
    passed = spectrum * np.exp(-thickness @ _attenuation(energy))
    edge = np.add.outer(rng.normal(0, 0.6, pixels), np.array(THRESHOLDS_KEV))
    above = 1 / (1 + np.exp(-(energy - edge[..., None]) / 1.5))
    bins = above - np.concatenate([above[:, 1:], 0 * above[:, :1]], axis=1)
    mean = np.einsum("ne,pke->nkp", passed, bins)
    mean *= open_counts / mean[0].sum(0).mean() * rng.normal(1, 0.03, pixels)
    rate = mean.sum(1) / open_counts * beam[:, None]
    dead = loss * rng.normal(1, 0.05, pixels)
    kept = beam[:, None] * np.exp(-dead * rate)
    counts: NDArray[np.float64] = mean * kept[:, None]
    return counts


@pytest.fixture(scope="session")
def make_scan() -> MakeScan:
    """A function that makes a scan of sound pixels."""

    def make(
        *,
        seed: int = 1,
        pixels: tuple[int, int] = (32, 40),
        open_counts: float = 20_000.0,
        opens: int = 4,
        darks: int = 2,
        wedge: bool = True,
        objects: int = 0,
        loss: float = 0.0,
        drift: float = 0.0,
    ) -> Scan:
        rng = np.random.default_rng(seed)
        steps = WEDGE_MM if wedge else []
        before = (opens + 1) // 2
        thickness = np.array(
            [(0.0, 0.0)] * before
            + list(steps)
            + [(0.0, 0.0)] * (opens - before)
            + [(20.0, 2.0)] * objects
        )
        role = ["open"] * before + ["wedge"] * len(steps)
        role += ["open"] * (opens - before) + ["object"] * objects
        beam = np.linspace(1.0, 1.0 + drift, len(thickness))
        half = [0, opens - 1] if opens > 2 and wedge else []
        half = [i if i == 0 else len(steps) + opens - 1 for i in half]
        beam[half] *= 0.5
        y, x = pixels
        mean = _expected(rng, thickness, beam, y * x, open_counts, loss)
        bins = rng.poisson(mean)
        above = np.cumsum(bins[:, ::-1], axis=1)[:, ::-1]
        counts = np.concatenate([np.zeros((darks, *above.shape[1:]), int), above])
        known = np.concatenate([np.zeros((darks, 2)), thickness])
        known[[i for i, r in enumerate(["dark"] * darks + role) if r == "object"]] = (
            np.nan
        )
        current = np.full(len(counts), 3.0)
        current[[darks + i for i in half]] = 1.5
        current[:darks] = 0.0
        return Scan(
            counts=CountsInMemory(
                counts.reshape(-1, len(THRESHOLDS_KEV), y, x).astype(np.uint32)
            ),
            thresholds_kev=np.array(THRESHOLDS_KEV),
            role=tuple(["dark"] * darks + role),
            thickness_mm=known,
            materials=(
                Layer(name="PMMA", formula="C5H8O2", density_g_cm3=1.19),
                Layer(name="Al", formula="Al", density_g_cm3=2.7),
            ),
            count_time_s=np.full(len(counts), 0.5),
            current_ma=current,
            voltage_kv=90.0,
            filters=(Filter(material="Al", thickness_mm=2.0),),
            sensor_material="CdTe",
            sensor_thickness_mm=1.0,
            pixel_size_um=(100.0, 100.0),
            pixel_mask=np.zeros(pixels, np.uint32),
            title="a made-up detector",
        )

    return make


def _counting_model(
    dead_time_ns: float = 150.0, tail_ns: float = 30.0
) -> CountingModel:
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
        shape=PulseShape(dead_time_ns=dead_time_ns, tail_ns=tail_ns),
    )


@pytest.fixture(scope="session")
def counting_model() -> CountingModel:
    """A made-up average pixel."""
    return _counting_model()


def made_up_calibration(pixels: tuple[int, int] = (6, 8)) -> Calibration:
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
        model=_counting_model(),
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


@pytest.fixture(scope="session")
def make_calibration() -> MakeCalibration:
    """A function that makes a calibration, as a wedge scan might have left it."""
    return made_up_calibration


def made_up_series(
    calibration: Calibration,
    objects: int,
    *,
    seed: int = 1,
    count_time_s: float = 0.1,
    drift: float = 0.01,
) -> Scan:
    """Counts drawn from a calibration's own pixels, with a slowly rising output."""
    rng = np.random.default_rng(seed)
    role = ("dark", "open", "open", *["object"] * objects, "open", "open")
    rows, columns = calibration.shape
    flat = np.arange(rows * columns)
    across = np.linspace(0.1, 0.9, columns)
    ready = [
        calibration.expected_bins(
            np.array([[thick * 8.0, (1.0 - thick) * 2.0]]), np.full(1, 3.0),
            np.ones(1), flat,
        )[:, 0]
        for thick in (0.15, 0.5, 0.85)
    ]  # fmt: skip
    free = calibration.expected_bins(
        np.zeros((1, 2)), np.full(1, 3.0), np.ones(1), flat
    )[:, 0]
    counts = np.zeros((len(role), LEVELS_KEV.size, rows, columns), np.uint32)
    where = np.tile(across, rows)
    for i, name in enumerate(role):
        if name == "dark":
            continue
        rate = free
        if name == "object":
            rate = np.choose(((where * 9 + i) % 3).astype(int)[:, None], ready)
        mean = rate * count_time_s * (1.0 + drift * i / len(role))
        bins = rng.poisson(mean)
        above = np.cumsum(bins[:, ::-1], axis=1)[:, ::-1]
        counts[i] = above.T.reshape(-1, rows, columns)
    beam = np.array([name != "dark" for name in role])
    known = np.array([name != "object" for name in role])
    return Scan(
        counts=CountsInMemory(counts),
        thresholds_kev=calibration.thresholds_kev,
        role=role,
        thickness_mm=np.where(known[:, None], 0.0, np.nan) * np.ones(2),
        materials=calibration.materials,
        count_time_s=np.full(len(role), count_time_s),
        current_ma=np.where(beam, 3.0, 0.0),
        voltage_kv=calibration.voltage_kv,
        filters=(Filter(material="Al", thickness_mm=2.0),),
        pixel_mask=np.zeros((rows, columns), np.uint32),
        title="a made-up series",
    )


@pytest.fixture(scope="session")
def make_series() -> MakeSeries:
    """A function that makes a series of object exposures for a calibration."""
    return made_up_series


@pytest.fixture(scope="session")
def load_benchmark() -> Callable[[str], ModuleType]:
    """A function that loads a program of the benchmarks, wherever tests are run from."""

    def load(name: str) -> ModuleType:
        path = Path(__file__).parent / "benchmarks" / f"{name}.py"
        spec = importlib.util.spec_from_file_location(name, path)
        assert spec is not None
        assert spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
        return module

    return load
