"""What a calibration's own errors do to estimates: promised and drawn.

Departures are drawn from the covariance that the calibration states, and the counts of
those other pixels are decomposed as if nothing had changed: a check of consistency.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.promise import promise
from spectral.calibration.residual import fit_residual
from spectral.calibration.result import Calibration, StepTable
from spectral.decomposition.likelihood import (
    count_derivatives,
    cramer_rao_bound,
    expected_counts,
    fisher_information,
)
from spectral.decomposition.responses import (
    Responses,
    calibration_spread,
    lost_fraction,
    responses,
)
from spectral.decomposition.solver import solve
from spectral.forward.counting_model import CountingModel
from spectral.physics.materials import find_material
from spectral.physics.pileup import PulseShape
from spectral.scans.scan import Layer

if TYPE_CHECKING:
    from spectral.forward.node_response import NodeTables

pytestmark = pytest.mark.property

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


MADE = calibration((30, 40))
FLAT = np.arange(1200)
TRUTH = np.array([4.5, 1.2])
CURRENT_MA, TIME_S = 1.0, 0.25


@pytest.fixture(scope="module")
def tables() -> NodeTables:
    return MADE.nodes(CURRENT_MA)


@pytest.fixture(scope="module")
def shifts(tables: NodeTables) -> np.ndarray:
    """Shift of each pixel's estimate when its departures were wrong, no noise."""
    rng = np.random.default_rng(5)
    sd = np.sqrt(np.diagonal(MADE.departure_covariance, axis1=2, axis2=3))
    wrong = MADE.departures + rng.standard_normal(MADE.departures.shape) * sd
    known = responses(MADE, tables, FLAT, count_time_s=TIME_S)
    true = responses(replace(MADE, departures=wrong), tables, FLAT, count_time_s=TIME_S)
    counts = expected_counts(TRUTH, true.weight, true.attenuation)
    found = solve(
        counts, known.weight, known.attenuation, start=TRUTH, bias_correction=False
    )
    return np.asarray(found.areal_density - TRUTH)


def bound(tables: NodeTables, dead: float) -> np.ndarray:
    """Smallest covariance of the estimates, shape (pixel, material, material)."""
    ready = responses(MADE, tables, FLAT, count_time_s=TIME_S)
    mean = expected_counts(TRUTH, ready.weight, ready.attenuation)
    slope, _ = count_derivatives(TRUTH, ready.weight, ready.attenuation)
    return np.asarray(cramer_rao_bound(fisher_information(mean, slope, dead=dead)))


def ready(tables: NodeTables, time: float) -> Responses:
    return responses(MADE, tables, FLAT, count_time_s=time)


def test_promised_error_is_the_scatter_of_wrong_calibrations(
    tables: NodeTables, shifts: np.ndarray
) -> None:
    covariance = bound(tables, lost_fraction(MADE.dead_time_ns, TIME_S))
    estimate = np.tile(TRUTH, (FLAT.size, 1))
    errors, extra = calibration_spread(
        MADE, tables, ready(tables, TIME_S), estimate, covariance, count_time_s=TIME_S
    )
    pulls = shifts / errors
    # 1200 draws: width known to 2 %; the shift is taken to first order
    np.testing.assert_allclose(pulls.std(axis=0), 1.0, atol=0.1)
    np.testing.assert_allclose(pulls.mean(axis=0), 0.0, atol=0.15)
    assert np.all(extra >= 0.0)


def test_perfect_calibration_adds_nothing(tables: NodeTables) -> None:
    perfect = replace(
        MADE, departure_covariance=np.zeros_like(MADE.departure_covariance)
    )
    estimate = np.tile(TRUTH, (FLAT.size, 1))
    errors, extra = calibration_spread(
        perfect,
        tables,
        ready(tables, TIME_S),
        estimate,
        bound(tables, 0.0),
        count_time_s=TIME_S,
    )
    np.testing.assert_array_equal(errors, 0.0)
    np.testing.assert_array_equal(extra, 0.0)


def test_longer_exposures_do_not_lessen_the_calibrations_error(
    tables: NodeTables,
) -> None:
    # counting errors fall as the square root of the time, the calibration's stay
    # (common practice, no source)
    estimate = np.tile(TRUTH, (FLAT.size, 1))
    plain = bound(tables, 0.0)
    short, little = calibration_spread(
        MADE, tables, ready(tables, TIME_S), estimate, plain, count_time_s=TIME_S
    )
    long, much = calibration_spread(
        MADE,
        tables,
        ready(tables, 100.0 * TIME_S),
        estimate,
        plain / 100.0,
        count_time_s=100.0 * TIME_S,
    )
    np.testing.assert_allclose(long, short, rtol=0.02)
    np.testing.assert_allclose(much / little, 100.0, rtol=0.02)


def test_misfit_grows_as_promised(tables: NodeTables) -> None:
    # deviance of noisy counts of wrongly calibrated pixels, over that of right ones
    rng = np.random.default_rng(6)
    worse = replace(
        MADE, departure_covariance=MADE.departure_covariance * np.float32(4)
    )
    sd = np.sqrt(np.diagonal(worse.departure_covariance, axis1=2, axis2=3))
    wrong = MADE.departures + rng.standard_normal(MADE.departures.shape) * sd
    time = 2.0
    known = responses(MADE, tables, FLAT, count_time_s=time)
    true = responses(replace(MADE, departures=wrong), tables, FLAT, count_time_s=time)
    counts = rng.poisson(expected_counts(TRUTH, true.weight, true.attenuation))
    found = solve(counts.astype(float), known.weight, known.attenuation, start=TRUTH)
    _, extra = calibration_spread(
        worse, tables, known, np.tile(TRUTH, (FLAT.size, 1)),
        bound(tables, 0.0) * TIME_S / time, count_time_s=time,
    )  # fmt: skip
    # the mean of 1200 deviances with 2 degrees of freedom each is known to some 4 %
    assert extra.mean() > 0.1
    assert found.deviance.mean() == pytest.approx(1.0 + extra.mean(), rel=0.12)


def test_promise_of_single_errors_and_pattern(shifts: np.ndarray) -> None:
    # one step of the wedge with the object's own areal density, current and time
    steps = MADE.steps
    areal = steps.areal_density.copy()
    areal[5] = TRUTH
    current, time = steps.current_ma.copy(), steps.count_time_s.copy()
    current[:], time[:] = CURRENT_MA, TIME_S
    made = replace(
        MADE,
        steps=replace(
            steps, areal_density=areal, current_ma=current, count_time_s=time
        ),
    )
    found = promise(made)
    assert found.exposure.tolist() == list(range(1, 16))
    dead = lost_fraction(MADE.dead_time_ns, TIME_S)
    smallest = np.sqrt(
        np.diagonal(bound(MADE.nodes(CURRENT_MA), dead), axis1=1, axis2=2)
    ).mean(axis=0)
    # pixels differ from the average one by a few percent of area and half a keV
    np.testing.assert_allclose(found.single_error[4], smallest, rtol=0.03)
    # no step was missed: no bias but that of the arithmetic
    np.testing.assert_allclose(found.bias / found.single_error, 0.0, atol=1e-6)
    # the pattern of this one step, near the median over all steps
    pattern = shifts.std(axis=0) / smallest
    assert np.all(found.fixed_pattern / pattern > 0.4)
    assert np.all(found.fixed_pattern / pattern < 2.5)


def test_promise_shows_a_step_that_is_not_what_it_is_said_to_be() -> None:
    steps = MADE.steps
    said = steps.areal_density[6]
    true = said + np.array([0.05, 0.0])
    flat = np.zeros(1, np.int64)
    average = replace(MADE, departures=np.zeros_like(MADE.departures))
    current, output = steps.current_ma[:1], np.ones(1)
    was = average.expected_bins(true[None], current, output, flat)[0, 0]
    expected = average.expected_bins(said[None], current, output, flat)[0, 0]
    physics = steps.physics_residual.copy()
    physics[6] = was / expected - 1.0
    found = promise(replace(average, steps=replace(steps, physics_residual=physics)))
    place = found.exposure.tolist().index(6)
    np.testing.assert_allclose(found.bias[place], [0.05, 0.0], atol=2e-3)
    others = np.delete(np.abs(found.bias), place, axis=0)
    assert others.max() < 0.02
