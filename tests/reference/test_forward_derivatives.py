"""Analytic derivatives of the forward model against finite differences."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.forward.node_response import NodeTables, node_tables, pixel_weights
from spectral.forward.pixel_response import (
    CurveTables,
    PixelDepartures,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from spectral.forward.counting_model import CountingModel

pytestmark = pytest.mark.reference

LEVELS_KEV = np.array([20.0, 32.0, 45.0, 60.0])
LARGEST = np.array([9.0, 3.0])


OBJECTS = np.array([[0.0, 0.0], [4.0, 0.5], [8.0, 2.5]])
RATE = 1.5e6
NAMES = ("ln_area", "shift_1", "shift_2", "shift_3", "shift_4", "variance", "ln_dead")
STEPS = np.array([1e-4, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3, 1e-4])


@pytest.fixture(scope="module")
def tables(counting_model: CountingModel) -> CurveTables:
    return curve_tables(counting_model, OBJECTS, RATE)


@pytest.fixture(scope="module")
def nodes(counting_model: CountingModel) -> NodeTables:
    return node_tables(counting_model, LEVELS_KEV, LARGEST, RATE)


@pytest.fixture
def pixels() -> PixelDepartures:
    """Departures away from 0, and thresholds away from the curve's grid points."""
    rng = np.random.default_rng(8)
    scale = np.array([0.05, 0.4, 0.4, 0.4, 0.4, 0.5, 0.1])
    # cubic pieces join at grid points, where the slope jumps: keep 0.1 keV away
    values = rng.uniform(0.3, 0.6, (6, 7)) * rng.choice([-1.0, 1.0], (6, 7)) * scale
    return PixelDepartures(values=values)


def moved(pixels: PixelDepartures, parameter: int, step: float) -> PixelDepartures:
    values = pixels.values.copy()
    values[:, parameter] += step
    return PixelDepartures(values=values)


@pytest.mark.parametrize("parameter", range(7), ids=NAMES)
def test_derivatives_of_a_pixels_counts(
    tables: CurveTables, pixels: PixelDepartures, parameter: int
) -> None:
    _, derivative = expected_above(tables, LEVELS_KEV, pixels)
    step = STEPS[parameter]
    up, _ = expected_above(tables, LEVELS_KEV, moved(pixels, parameter, step))
    down, _ = expected_above(tables, LEVELS_KEV, moved(pixels, parameter, -step))
    numeric = (up - down) / (2.0 * step)
    np.testing.assert_allclose(
        derivative[..., parameter], numeric, rtol=1e-5, atol=1e-7 * np.abs(up).max()
    )


@pytest.mark.parametrize("parameter", range(7), ids=NAMES)
def test_derivatives_of_node_weights(
    nodes: NodeTables, pixels: PixelDepartures, parameter: int
) -> None:
    weight, change = pixel_weights(nodes, LEVELS_KEV, pixels, derivatives=True)
    assert change is not None
    step = STEPS[parameter]
    up, none = pixel_weights(nodes, LEVELS_KEV, moved(pixels, parameter, step))
    down, _ = pixel_weights(nodes, LEVELS_KEV, moved(pixels, parameter, -step))
    assert none is None
    numeric = (up - down) / (2.0 * step)
    np.testing.assert_allclose(
        change[:, :, parameter], numeric, rtol=1e-5, atol=1e-7 * np.abs(weight).max()
    )


def relative(found: np.ndarray, truth: np.ndarray, scale: np.ndarray) -> float:
    """Largest difference over levels from 15 to 80 keV, as a share of the curve."""
    part = slice(30, 160)
    return float((np.abs(found - truth) / scale)[:, part].max())


def test_changes_of_the_curve_are_those_of_the_model(
    counting_model: CountingModel, tables: CurveTables
) -> None:
    # every change of the average pixel's curve, against the whole model computed anew
    model = counting_model
    step = 0.01

    def curve(of: CountingModel, rate: float = RATE) -> np.ndarray:
        return of.counting_curves(OBJECTS, rate)

    up, down = np.exp(step), np.exp(-step)
    rate = (curve(model, RATE * up) / up - curve(model, RATE * down) / down) / (
        2 * step
    )
    slow, fast = model.with_dead_time(up), model.with_dead_time(down)
    dead = (curve(slow) - curve(fast)) / (2 * step)
    more, less = (
        replace(model, noise_kev=float(np.sqrt(model.noise_kev**2 + v)))
        for v in (0.02, -0.02)
    )
    variance = (curve(more) - curve(less)) / 0.04
    assert relative(tables.by_rate, rate, tables.curve) < 1e-3
    assert relative(tables.by_dead_time, dead, tables.curve) < 1e-3
    assert relative(tables.by_variance, variance, tables.curve) < 1e-3


@pytest.mark.parametrize(
    ("parameter", "size"), [(0, 0.03), (2, 0.7), (5, 0.8), (6, 0.06)], ids=str
)
def test_a_departing_pixel_counts_as_the_model_computed_for_it(
    counting_model: CountingModel, tables: CurveTables, parameter: int, size: float
) -> None:
    # first order in all but the thresholds: usual departures leave less than 0.1 %
    model = counting_model
    rate = RATE
    levels = LEVELS_KEV.copy()
    if parameter == 0:
        rate *= np.exp(size)
    elif parameter == 2:
        levels[1] += size
    elif parameter == 5:
        model = replace(model, noise_kev=float(np.sqrt(model.noise_kev**2 + size)))
    else:
        model = model.with_dead_time(float(np.exp(size)))
    truth, _ = expected_above(
        curve_tables(model, OBJECTS, rate),
        levels,
        PixelDepartures(values=np.zeros((1, 7))),
    )
    values = np.zeros((1, 7))
    values[0, parameter] = size
    found, _ = expected_above(tables, LEVELS_KEV, PixelDepartures(values=values))
    average, _ = expected_above(
        tables, LEVELS_KEV, PixelDepartures(values=np.zeros((1, 7)))
    )
    left, before = np.abs(found / truth - 1.0), np.abs(average / truth - 1.0)
    assert left.max() < 1e-3
    assert left.max() < 0.15 * before.max()
