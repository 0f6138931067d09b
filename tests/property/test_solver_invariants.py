"""What holds for the solver whatever the object, dose or order."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from spectral.decomposition.likelihood import deviance
from spectral.decomposition.solver import solve
from spectral.decomposition.start_values import StartRegression

Array = NDArray[np.float64]
pytestmark = pytest.mark.property

ENERGY = np.linspace(20.0, 100.0, 9)
ATTENUATION = np.stack(
    (0.18 + 0.8 * (20.0 / ENERGY) ** 3, 0.15 + 6.0 * (20.0 / ENERGY) ** 3), axis=1
)
EDGES = np.array([[15.0], [35.0], [50.0], [70.0]])
ABOVE = 1.0 / (1.0 + np.exp((EDGES - ENERGY) / 3.0))
WEIGHT = 5e3 * np.vstack((ABOVE[:-1] - ABOVE[1:], ABOVE[-1:]))[None]
START = StartRegression.fit(WEIGHT, ATTENUATION)

seeds = st.integers(0, 2**32 - 1)
objects = st.tuples(st.floats(0.0, 6.0), st.floats(0.0, 0.8))
doses = st.floats(0.02, 50.0)
few = settings(max_examples=30, deadline=None)


def _draw(seed: int, truth: tuple[float, float], dose: float, pixels: int) -> Array:
    expected = dose * (WEIGHT[0] * np.exp(-ATTENUATION @ np.array(truth))).sum(axis=1)
    drawn = np.random.default_rng(seed).poisson(expected, (pixels, len(expected)))
    return drawn.astype(np.float64)


@few
@given(seeds, objects, doses, st.booleans())
def test_order_of_materials_is_the_order_of_results(
    seed: int, truth: tuple[float, float], dose: float, corrected: bool
) -> None:
    counts = _draw(seed, truth, dose, 5)
    one = solve(
        counts, dose * WEIGHT, ATTENUATION, start=truth, bias_correction=corrected
    )
    two = solve(
        counts,
        dose * WEIGHT,
        ATTENUATION[:, ::-1],
        start=truth[::-1],
        bias_correction=corrected,
    )
    error = one.standard_error
    np.testing.assert_allclose(
        two.areal_density[:, ::-1] / error, one.areal_density / error, atol=1e-6
    )
    np.testing.assert_allclose(two.covariance[:, ::-1], one.covariance, rtol=1e-6)


@few
@given(seeds, objects, doses, st.permutations(range(4)))
def test_order_of_bins_is_of_no_matter(
    seed: int, truth: tuple[float, float], dose: float, order: list[int]
) -> None:
    counts = _draw(seed, truth, dose, 5)
    one = solve(counts, dose * WEIGHT, ATTENUATION, start=truth)
    two = solve(counts[:, order], dose * WEIGHT[:, order], ATTENUATION, start=truth)
    error = one.standard_error
    np.testing.assert_allclose(
        two.areal_density / error, one.areal_density / error, atol=1e-6
    )


@few
@given(seeds, objects, doses, st.integers(1, 200), st.integers(1, 3))
def test_neighbours_blocks_and_threads_change_no_bit(
    seed: int, truth: tuple[float, float], dose: float, cut: int, threads: int
) -> None:
    counts = _draw(seed, truth, dose, 201)
    spread = np.random.default_rng(seed).uniform(0.8, 1.2, (201, 4, 1))
    weight = dose * WEIGHT * spread
    whole = solve(counts, weight, ATTENUATION, start=START, threads=threads)
    left = solve(counts[:cut], weight[:cut], ATTENUATION, start=START)
    right = solve(counts[cut:], weight[cut:], ATTENUATION, start=START)
    for name in ("areal_density", "covariance", "deviance", "steps", "outcome"):
        parts = np.concatenate((getattr(left, name), getattr(right, name)))
        np.testing.assert_array_equal(parts, getattr(whole, name))


def test_many_blocks_on_two_threads_change_no_bit() -> None:
    counts = _draw(1, (2.0, 0.3), 1.0, 20_000)
    one = solve(counts, WEIGHT, ATTENUATION, start=START)
    two = solve(counts, WEIGHT, ATTENUATION, start=START, threads=2)
    np.testing.assert_array_equal(one.areal_density, two.areal_density)
    np.testing.assert_array_equal(one.covariance, two.covariance)


@few
@given(objects, doses, st.floats(1.05, 20.0))
def test_more_dose_is_less_variance(
    truth: tuple[float, float], dose: float, more: float
) -> None:
    expected = dose * (WEIGHT[0] * np.exp(-ATTENUATION @ np.array(truth))).sum(axis=1)
    counts = np.stack((expected, more * expected))
    weight = np.concatenate((dose * WEIGHT, more * dose * WEIGHT))
    for corrected in (False, True):
        found = solve(
            counts, weight, ATTENUATION, start=truth, bias_correction=corrected
        )
        variance = found.covariance[:, [0, 2]]
        assert (variance[1] < variance[0]).all()
    np.testing.assert_allclose(
        solve(
            counts, weight, ATTENUATION, start=truth, bias_correction=False
        ).covariance[0],
        more
        * solve(
            counts, weight, ATTENUATION, start=truth, bias_correction=False
        ).covariance[1],
        rtol=1e-6,
    )


@few
@given(seeds, objects, doses)
def test_deviance_is_never_negative_and_least_at_the_plain_root(
    seed: int, truth: tuple[float, float], dose: float
) -> None:
    counts = _draw(seed, truth, dose, 4)
    weight = dose * WEIGHT
    root = solve(
        counts,
        weight,
        ATTENUATION,
        start=truth,
        bias_correction=False,
        tolerance=1e-16,
    )
    assert (root.deviance >= 0.0).all()
    at_truth = deviance(
        counts, (weight[0] * np.exp(-ATTENUATION @ np.array(truth))).sum(axis=1)
    )
    free = 4 - 2
    assert (root.deviance * free <= at_truth + 1e-8).all()


@few
@given(seeds, objects, st.floats(1e-4, 0.05), st.booleans())
def test_nonnegative_results_are_and_free_ones_stay(
    seed: int, truth: tuple[float, float], dose: float, corrected: bool
) -> None:
    counts = _draw(seed, truth, dose, 20)
    held, free = (
        solve(
            counts,
            dose * WEIGHT,
            ATTENUATION,
            start=START,
            bias_correction=corrected,
            nonnegative=sign,
            max_steps=300,
            tolerance=1e-16,
        )
        for sign in (True, False)
    )
    assert (held.areal_density >= 0.0).all()
    inside = (free.areal_density > 0.0).all(axis=1)
    inside &= (free.outcome == 0) & (held.outcome == 0)
    shift = held.areal_density[inside] - free.areal_density[inside]
    np.testing.assert_allclose(shift / free.standard_error[inside], 0.0, atol=1e-4)


@few
@given(seeds, objects, st.floats(0.1, 10.0), st.floats(0.1, 10.0))
def test_units_of_areal_density_carry_through(
    seed: int, truth: tuple[float, float], first: float, second: float
) -> None:
    counts = _draw(seed, truth, 1.0, 5)
    unit = np.array([first, second])
    one = solve(counts, WEIGHT, ATTENUATION, start=truth)
    two = solve(counts, WEIGHT, ATTENUATION / unit, start=np.array(truth) * unit)
    error = one.standard_error
    np.testing.assert_allclose(
        two.areal_density / unit / error, one.areal_density / error, atol=1e-6
    )
