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

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration
    from spectral.forward.node_response import NodeTables

pytestmark = pytest.mark.property

FLAT = np.arange(1200)
TRUTH = np.array([4.5, 1.2])
CURRENT_MA, TIME_S = 1.0, 0.25


@pytest.fixture(scope="module")
def made(make_calibration: Callable[..., Calibration]) -> Calibration:
    return make_calibration((30, 40))


@pytest.fixture(scope="module")
def tables(made: Calibration) -> NodeTables:
    return made.nodes(CURRENT_MA)


@pytest.fixture(scope="module")
def shifts(made: Calibration, tables: NodeTables) -> np.ndarray:
    """Shift of each pixel's estimate when its departures were wrong, no noise."""
    rng = np.random.default_rng(5)
    sd = np.sqrt(np.diagonal(made.departure_covariance, axis1=2, axis2=3))
    wrong = made.departures + rng.standard_normal(made.departures.shape) * sd
    known = responses(made, tables, FLAT, count_time_s=TIME_S)
    true = responses(replace(made, departures=wrong), tables, FLAT, count_time_s=TIME_S)
    counts = expected_counts(TRUTH, true.weight, true.attenuation)
    found = solve(
        counts, known.weight, known.attenuation, start=TRUTH, bias_correction=False
    )
    return np.asarray(found.areal_density - TRUTH)


def bound(made: Calibration, tables: NodeTables, dead: float) -> np.ndarray:
    """Smallest covariance of the estimates, shape (pixel, material, material)."""
    ready = responses(made, tables, FLAT, count_time_s=TIME_S)
    mean = expected_counts(TRUTH, ready.weight, ready.attenuation)
    slope, _ = count_derivatives(TRUTH, ready.weight, ready.attenuation)
    return np.asarray(cramer_rao_bound(fisher_information(mean, slope, dead=dead)))


def ready(made: Calibration, tables: NodeTables, time: float) -> Responses:
    return responses(made, tables, FLAT, count_time_s=time)


def test_promised_error_is_the_scatter_of_wrong_calibrations(
    made: Calibration, tables: NodeTables, shifts: np.ndarray
) -> None:
    covariance = bound(made, tables, lost_fraction(made.dead_time_ns, TIME_S))
    estimate = np.tile(TRUTH, (FLAT.size, 1))
    errors, extra, _ = calibration_spread(
        made,
        tables,
        ready(made, tables, TIME_S),
        estimate,
        covariance,
        count_time_s=TIME_S,
    )
    pulls = shifts / errors
    # 1200 draws: width known to 2 %; the shift is taken to first order
    np.testing.assert_allclose(pulls.std(axis=0), 1.0, atol=0.1)
    np.testing.assert_allclose(pulls.mean(axis=0), 0.0, atol=0.15)
    assert np.all(extra >= 0.0)


def test_perfect_calibration_adds_nothing(
    made: Calibration, tables: NodeTables
) -> None:
    perfect = replace(
        made, departure_covariance=np.zeros_like(made.departure_covariance)
    )
    estimate = np.tile(TRUTH, (FLAT.size, 1))
    errors, extra, _ = calibration_spread(
        perfect,
        tables,
        ready(made, tables, TIME_S),
        estimate,
        bound(made, tables, 0.0),
        count_time_s=TIME_S,
    )
    np.testing.assert_array_equal(errors, 0.0)
    np.testing.assert_array_equal(extra, 0.0)


def test_longer_exposures_do_not_lessen_the_calibrations_error(
    made: Calibration,
    tables: NodeTables,
) -> None:
    # counting errors fall as the square root of the time, the calibration's stay
    # (common practice, no source)
    estimate = np.tile(TRUTH, (FLAT.size, 1))
    plain = bound(made, tables, 0.0)
    short, little, _ = calibration_spread(
        made, tables, ready(made, tables, TIME_S), estimate, plain, count_time_s=TIME_S
    )
    long, much, _ = calibration_spread(
        made,
        tables,
        ready(made, tables, 100.0 * TIME_S),
        estimate,
        plain / 100.0,
        count_time_s=100.0 * TIME_S,
    )
    np.testing.assert_allclose(long, short, rtol=0.02)
    np.testing.assert_allclose(much / little, 100.0, rtol=0.02)


def test_misfit_grows_as_promised(made: Calibration, tables: NodeTables) -> None:
    # deviance of noisy counts of wrongly calibrated pixels, over that of right ones
    rng = np.random.default_rng(6)
    worse = replace(
        made, departure_covariance=made.departure_covariance * np.float32(4)
    )
    sd = np.sqrt(np.diagonal(worse.departure_covariance, axis1=2, axis2=3))
    wrong = made.departures + rng.standard_normal(made.departures.shape) * sd
    time = 2.0
    known = responses(made, tables, FLAT, count_time_s=time)
    true = responses(replace(made, departures=wrong), tables, FLAT, count_time_s=time)
    counts = rng.poisson(expected_counts(TRUTH, true.weight, true.attenuation))
    found = solve(counts.astype(float), known.weight, known.attenuation, start=TRUTH)
    _, extra, _ = calibration_spread(
        worse, tables, known, np.tile(TRUTH, (FLAT.size, 1)),
        bound(made, tables, 0.0) * TIME_S / time, count_time_s=time,
    )  # fmt: skip
    # the mean of 1200 deviances with 2 degrees of freedom each is known to some 4 %
    assert extra.mean() > 0.1
    assert found.deviance.mean() == pytest.approx(1.0 + extra.mean(), rel=0.12)


def test_promise_of_single_errors_and_pattern(
    made: Calibration, shifts: np.ndarray
) -> None:
    # one step of the wedge with the object's own areal density, current and time
    steps = made.steps
    areal = steps.areal_density.copy()
    areal[5] = TRUTH
    current, time = steps.current_ma.copy(), steps.count_time_s.copy()
    current[:], time[:] = CURRENT_MA, TIME_S
    measured = replace(
        made,
        steps=replace(
            steps, areal_density=areal, current_ma=current, count_time_s=time
        ),
    )
    found = promise(measured)
    assert found.exposure.tolist() == list(range(1, 16))
    dead = lost_fraction(made.dead_time_ns, TIME_S)
    smallest = np.sqrt(
        np.diagonal(bound(made, made.nodes(CURRENT_MA), dead), axis1=1, axis2=2)
    ).mean(axis=0)
    # pixels differ from the average one by a few percent of area and half a keV
    np.testing.assert_allclose(found.single_error[4], smallest, rtol=0.03)
    # no step was missed: no bias but that of the arithmetic
    np.testing.assert_allclose(found.bias / found.single_error, 0.0, atol=1e-6)
    # the pattern of this one step, near the median over all steps
    pattern = shifts.std(axis=0) / smallest
    assert np.all(found.fixed_pattern / pattern > 0.4)
    assert np.all(found.fixed_pattern / pattern < 2.5)


def test_promise_shows_a_step_that_is_not_what_it_is_said_to_be(
    made: Calibration,
) -> None:
    steps = made.steps
    said = steps.areal_density[6]
    true = said + np.array([0.05, 0.0])
    flat = np.zeros(1, np.int64)
    average = replace(made, departures=np.zeros_like(made.departures))
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
