"""Compiled node weights against their NumPy twin, and how few sets of them are made."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.decomposition.conditions import (
    KEPT_TABLES,
    ConditionsStore,
    precision_for,
)
from spectral.decomposition.responses import BLOCK, responses
from spectral.forward.node_response import pixel_weights

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration


@pytest.mark.parametrize("threads", [1, 2])
def test_compiled_weights_are_those_of_numpy(
    threads: int, make_calibration: Callable[..., Calibration]
) -> None:
    calibration = make_calibration((100, 100))
    tables = calibration.nodes(3.0)
    flat = np.arange(3, 10_000, 1)
    assert flat.size > BLOCK
    twin, _ = pixel_weights(
        tables, calibration.levels_kev, calibration.pixels(flat).brightened(1.02)
    )
    found = responses(
        calibration, tables, flat, count_time_s=0.2, output=1.02, threads=threads
    ).weight
    np.testing.assert_allclose(found, 0.2 * twin, rtol=1e-12, atol=1e-12 * twin.max())


def test_conditions_do_not_depend_on_what_came_before(
    make_calibration: Callable[..., Calibration],
) -> None:
    calibration = make_calibration()
    flat = np.arange(48)
    one, other = ConditionsStore(calibration), ConditionsStore(calibration)
    for current, output in ((3.0, 0.9), (2.9991, 1.0), (3.2, 1.08)):
        other.at(current, output, 0.1, flat)
    first = one.at(3.0, 1.0, 0.1, flat)
    second = other.at(3.0, 1.0, 0.1, flat)
    np.testing.assert_array_equal(first.responses.weight, second.responses.weight)
    np.testing.assert_array_equal(first.start.coefficients, second.start.coefficients)
    np.testing.assert_array_equal(first.rate_limit, second.rate_limit)


def test_single_precision_serves_until_rounding_would_show(
    make_calibration: Callable[..., Calibration],
) -> None:
    smooth = np.full((4, 16), 1e3)
    assert precision_for(smooth) is np.float32
    # half a unit in the last of 24 binary digits: 6e-8 of 1e12 is 0.06 of its root
    assert precision_for(6e7 * smooth) is np.float64
    rough = smooth + 1e7 * np.resize([1.0, -1.0], 16)
    np.testing.assert_allclose(rough.sum(axis=1), smooth.sum(axis=1))
    assert precision_for(rough) is np.float64
    made = ConditionsStore(make_calibration()).at(3.0, 1.0, 0.1, np.arange(48))
    assert made.responses.weight.dtype == np.float32


def test_current_read_back_with_noise_needs_few_tables(
    make_calibration: Callable[..., Calibration], monkeypatch: pytest.MonkeyPatch
) -> None:
    calibration = make_calibration()
    made: list[float] = []
    nodes = type(calibration).nodes

    def counted(self: Calibration, current_ma: float, output: float = 1.0) -> object:
        made.append(current_ma)
        return nodes(self, 3.0, output) if len(made) == 1 else held

    held = nodes(calibration, 3.0)
    monkeypatch.setattr(type(calibration), "nodes", counted)
    store = ConditionsStore(calibration)
    rng = np.random.default_rng(1)
    for current in 3.0 * np.exp(rng.normal(0.0, 2e-3, 2000)):
        store.tables(float(current), 1.0)
    assert len(made) == len(set(made)) <= KEPT_TABLES
    for current in np.linspace(1.0, 4.0, 200):
        store.tables(float(current), 1.0)
    assert len(store._nodes) == KEPT_TABLES


def test_weights_at_a_current_between_steps_are_near_the_exact_ones(
    make_calibration: Callable[..., Calibration],
) -> None:
    calibration = make_calibration()
    flat = np.arange(48)
    areal = np.array([4.0, 1.0])
    near = ConditionsStore(calibration).at(3.0013, 1.013, 0.1, flat).responses
    tables = calibration.nodes(3.0013, 1.013)
    exact = responses(calibration, tables, flat, count_time_s=0.1)
    # half a step of the output, 1e-4, is the most that may be missing; nodes add theirs
    np.testing.assert_allclose(
        near.weight @ np.exp(-near.attenuation @ areal),
        exact.weight @ np.exp(-exact.attenuation @ areal),
        rtol=2e-4,
    )
