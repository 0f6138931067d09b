"""The tube's output in an object scan, told from its open exposures."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from spectral.calibration.residual import fit_residual
from spectral.calibration.result import Calibration, StepTable
from spectral.decomposition.session import current_of, normalise
from spectral.forward.counting_model import CountingModel
from spectral.physics.materials import find_material
from spectral.physics.pileup import PulseShape
from spectral.scans.scan import CountsInMemory, Layer, Scan

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


CALIBRATION = calibration()
TIME_S = 40.0
"""Long, so that rounding to whole counts does not matter."""


def scan(
    role: tuple[str, ...],
    output: np.ndarray,
    *,
    current_ma: np.ndarray | None = None,
    by_bin: np.ndarray | None = None,
) -> Scan:
    """Counts of the calibration's own pixels in a beam of given output, no noise."""
    n = len(role)
    current = np.full(n, 4.0) if current_ma is None else current_ma
    areal = np.array([[4.0, 1.0] if r == "object" else [0.0, 0.0] for r in role])
    y, x = CALIBRATION.shape
    bins = np.empty((n, 4, y * x))
    for i in range(n):
        rate = CALIBRATION.expected_bins(
            areal[i : i + 1], current[i : i + 1], output[i : i + 1], np.arange(y * x)
        )
        bins[i] = rate[:, 0].T * TIME_S * (0.0 if role[i] == "dark" else 1.0)
    if by_bin is not None:
        bins *= by_bin[:, None]
    above = np.cumsum(np.round(bins)[:, ::-1], axis=1)[:, ::-1]
    return Scan(
        counts=CountsInMemory(above.reshape(n, 4, y, x).astype(np.uint32)),
        thresholds_kev=CALIBRATION.thresholds_kev,
        role=role,
        thickness_mm=np.where(areal > 0.0, np.nan, 0.0),
        materials=CALIBRATION.materials,
        count_time_s=np.full(n, TIME_S),
        current_ma=current,
        voltage_kv=90.0,
        pixel_mask=np.zeros((y, x), np.uint32),
    )


ALL = np.ones(CALIBRATION.shape, bool)


def test_constant_output_is_found() -> None:
    role = ("dark", "open", "object", "object", "open")
    found = normalise(CALIBRATION, scan(role, np.full(5, 1.07)), ALL)
    np.testing.assert_allclose(found.output, 1.07, rtol=1e-5)
    assert found.opens.tolist() == [1, 4]
    np.testing.assert_allclose(found.by_bin, 1.0, rtol=1e-5)
    assert found.notes == ()


def test_linear_drift_between_opens_is_followed() -> None:
    role = ("dark", "open", "open", *["object"] * 5, "open")
    output = 0.95 + 0.01 * np.arange(9.0)
    found = normalise(CALIBRATION, scan(role, output), ALL)
    np.testing.assert_allclose(found.output, output, rtol=1e-5)
    np.testing.assert_allclose(found.open_output, output[[1, 2, 8]], rtol=1e-5)


def test_opens_on_one_side_give_their_mean() -> None:
    role = ("open", "open", "object", "object")
    output = np.array([1.0, 1.02, 1.04, 1.06])
    found = normalise(CALIBRATION, scan(role, output), ALL)
    np.testing.assert_allclose(found.output, 1.01, rtol=1e-5)


def test_output_is_told_from_the_current() -> None:
    # half the current means half the rate, and less pile-up, not less output
    role = ("open", "object", "open")
    current = np.array([4.0, 4.0, 2.0])
    found = normalise(
        CALIBRATION, scan(role, np.full(3, 1.03), current_ma=current), ALL
    )
    np.testing.assert_allclose(found.open_output, 1.03, rtol=1e-5)


def test_no_open_exposure_is_noted() -> None:
    found = normalise(CALIBRATION, scan(("dark", "object"), np.full(2, 1.1)), ALL)
    np.testing.assert_array_equal(found.output, 1.0)
    np.testing.assert_array_equal(found.by_bin, 1.0)
    assert found.opens.size == found.open_output.size == 0
    assert any("no open exposure in this scan" in note for note in found.notes)


def test_moved_thresholds_show_in_the_bins() -> None:
    moved = np.array([1.01, 1.0, 0.99, 1.0])
    role = ("open", "object", "open")
    found = normalise(CALIBRATION, scan(role, np.ones(3), by_bin=moved), ALL)
    relative = found.by_bin / found.by_bin[1]
    # 0.1 %: the counts added or missing also move the output, and pile-up with it
    np.testing.assert_allclose(relative, moved, rtol=1e-3)


def test_unusable_pixels_are_not_asked() -> None:
    role = ("open", "object", "open")
    made = scan(role, np.ones(3))
    counts = made.counts.read([0, 1, 2]).copy()
    counts[:, :, 2, 3] *= 3
    usable = ALL.copy()
    usable[2, 3] = False
    found = normalise(CALIBRATION, made.with_counts(counts), usable)
    np.testing.assert_allclose(found.output, 1.0, rtol=1e-5)
    disturbed = normalise(CALIBRATION, made.with_counts(counts), ALL)
    assert disturbed.output[0] > 1.01


def test_current_that_the_scan_does_not_give_is_the_calibrations() -> None:
    made = scan(("open", "object"), np.ones(2))
    given = made.current_ma
    assert given is not None
    np.testing.assert_array_equal(current_of(made, CALIBRATION), given)
    unknown = current_of(replace(made, current_ma=None), CALIBRATION)
    np.testing.assert_array_equal(unknown, 4.0)


@pytest.mark.slow
def test_output_is_as_good_as_the_counts() -> None:
    # Poisson counts of all pixels together: relative error 1 over the root of their sum
    rng = np.random.default_rng(3)
    exact = scan(("open", "object", "open"), np.ones(3))
    counts = exact.counts.read([0, 1, 2]).astype(float)
    bins = -np.diff(counts, axis=1, append=0.0) / 400.0
    short = replace(exact, count_time_s=np.full(3, TIME_S / 400.0))
    pulls = []
    for _ in range(20):
        drawn = np.cumsum(rng.poisson(bins)[:, ::-1], axis=1)[:, ::-1]
        found = normalise(CALIBRATION, short.with_counts(drawn.astype(np.uint32)), ALL)
        error = 1.0 / np.sqrt(counts[0, 0].sum() / 400.0)
        pulls.extend((found.open_output - 1.0) / error)
    # pile-up hides part of a change of the output: its error is a little larger
    assert abs(np.mean(pulls)) < 5.0 / np.sqrt(40) * 1.3
    assert 0.75 < np.std(pulls) < 1.6
