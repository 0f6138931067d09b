"""What the solver refuses, what it says of each pixel, and cases solved by hand."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from spectral.decomposition.joint_estimate import joint_estimate
from spectral.decomposition.likelihood import (
    cramer_rao_bound,
    dead_fraction,
    deviance,
    fisher_information,
    inverse_covariance_product,
)
from spectral.decomposition.solver import SolveOutcome, solve
from spectral.decomposition.start_values import StartRegression, default_domain
from spectral.errors import InputError

Array = NDArray[np.float64]
WEIGHT = np.array([[[800.0, 150.0, 50.0], [100.0, 500.0, 100.0], [0.0, 50.0, 900.0]]])
ATTENUATION = np.array([[0.5, 2.5], [0.25, 0.6], [0.18, 0.2]])
TRUTH = np.array([1.5, 0.3])
EXPECTED = (WEIGHT[0] * np.exp(-ATTENUATION @ TRUTH)).sum(axis=1)


def _counts(pixels: int = 3) -> Array:
    return np.tile(np.round(EXPECTED), (pixels, 1))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"counts": np.ones(3)}, r"counts must be \(pixel, bin\)"),
        ({"weight": np.ones((2, 3, 3))}, "weight has 2 pixels, counts have 3"),
        ({"weight": np.ones((1, 4, 3))}, "weight has 4 bins, counts have 3"),
        ({"weight": np.ones((1, 3, 5))}, "weight has 5 nodes, attenuation 3"),
        ({"attenuation": np.ones((3, 4))}, "3 bins cannot tell 4 materials apart"),
        ({"attenuation": np.full((3, 2), np.nan)}, "attenuation must be finite"),
        ({"dead_fraction": np.zeros(2)}, "dead_fraction must be a number or 3"),
        ({"start": np.zeros(3)}, r"start must be \(2,\) or \(3, 2\)"),
        ({"max_steps": 0}, "max_steps must be at least 1"),
        ({"threads": 0}, "threads 1 and tolerance 0"),
        ({"tolerance": -1.0}, "threads 1 and tolerance 0"),
        ({"attenuation": -np.ones((3, 2))}, "attenuation must be positive for some"),
    ],
)
def test_wrong_arguments_are_named(change: dict[str, Any], message: str) -> None:
    arguments: dict[str, Any] = {
        "counts": _counts(),
        "weight": WEIGHT,
        "attenuation": ATTENUATION,
    } | change
    with pytest.raises(InputError, match=message):
        solve(**arguments)


def test_a_start_for_other_bins_is_refused() -> None:
    other = StartRegression.fit(WEIGHT[0, :2], ATTENUATION)
    with pytest.raises(InputError, match="start was fitted for other bins"):
        solve(_counts(), WEIGHT, ATTENUATION, start=other)


def test_a_start_needs_lit_domain_points() -> None:
    with pytest.raises(InputError, match="only 0 of 70 domain_points"):
        StartRegression.fit(
            -WEIGHT[0], ATTENUATION, default_domain(WEIGHT[0], ATTENUATION)
        )


def test_likelihood_refuses_what_cannot_be() -> None:
    with pytest.raises(InputError, match="dead_time_s must be at least 0"):
        dead_fraction(2.0, 1.0)
    with pytest.raises(InputError, match="derivative has 2 bins, expected has 3"):
        fisher_information(np.ones(3), np.ones((2, 1)))
    with pytest.raises(InputError, match="expected counts must be above 0"):
        fisher_information(np.array([1.0, 0.0]), np.ones((2, 1)))
    with pytest.raises(InputError, match="information is singular"):
        cramer_rao_bound(np.ones((2, 2)))


@pytest.mark.parametrize(
    ("weight", "message"),
    [
        (np.ones((3, 3)), r"counts must be \(sample, bin\)"),
        (np.ones((2, 3, 3)), "weight must be"),
    ],
)
def test_joint_estimate_names_wrong_shapes(weight: Array, message: str) -> None:
    with pytest.raises(InputError, match=message):
        joint_estimate(_counts(), weight, ATTENUATION)


def test_outcomes_tell_pixels_apart() -> None:
    counts = np.vstack((_counts(6), np.zeros((1, 3))))
    weight = np.tile(WEIGHT, (7, 1, 1))
    counts[1, 0] = np.inf
    counts[2, 2] = -1.0
    weight[3, 1] = 0.0
    weight[4] = weight[4, :1]  # three equal bins: two materials cannot be told apart
    found = solve(counts, weight, ATTENUATION, dead_fraction=[0, 0, 0, 0, 0, -1, 0])
    assert [SolveOutcome(o).name for o in found.outcome] == [
        "CONVERGED",
        "UNUSABLE",
        "UNUSABLE",
        "UNUSABLE",
        "SINGULAR",
        "UNUSABLE",
        "FEW_COUNTS",
    ]
    missing = np.isnan(found.areal_density).all(axis=1)
    np.testing.assert_array_equal(missing, found.outcome >= SolveOutcome.SINGULAR)
    assert np.isfinite(found.areal_density[6]).all()  # no counts at all


def test_the_step_limit_is_told() -> None:
    far = np.array([9.0, 2.0])
    found = solve(_counts(1), WEIGHT, ATTENUATION, start=far, max_steps=2)
    assert found.outcome[0] == SolveOutcome.STEPS_SPENT
    assert found.steps[0] == 2
    assert np.isfinite(found.areal_density).all()


@pytest.mark.parametrize("start", [(-6.0, 3.0), (12.0, 3.0), (0.0, -3.0)])
def test_a_far_start_ends_at_the_same_root(start: tuple[float, float]) -> None:
    near = solve(_counts(1), WEIGHT, ATTENUATION, tolerance=1e-18)
    far = solve(_counts(1), WEIGHT, ATTENUATION, start=start, tolerance=1e-18)
    np.testing.assert_allclose(far.areal_density, near.areal_density, rtol=1e-9)


def test_no_pixels_is_no_fault() -> None:
    found = solve(np.empty((0, 3)), WEIGHT, ATTENUATION)
    assert found.areal_density.shape == (0, 2)


def test_inputs_stay_as_they_were_and_may_be_read_only() -> None:
    counts, weight = _counts(), WEIGHT.copy()
    for array in (counts, weight):
        array.flags.writeable = False
    solve(counts, weight, ATTENUATION)
    np.testing.assert_array_equal(weight, WEIGHT)


def test_exact_counts_give_the_truth_and_no_deviance() -> None:
    found = solve(
        EXPECTED[None], WEIGHT, ATTENUATION, bias_correction=False, tolerance=1e-20
    )
    np.testing.assert_allclose(found.areal_density[0], TRUTH, rtol=1e-9)
    assert found.deviance[0] < 1e-9


def test_negative_weights_of_pile_up_are_allowed() -> None:
    # A fourth node takes pairs away: its attenuation is the sum of two others.
    loss = -0.02 * np.ones((1, 3, 1)) * WEIGHT.sum(axis=2, keepdims=True)
    weight = np.concatenate((WEIGHT, loss), axis=2)
    attenuation = np.vstack((ATTENUATION, ATTENUATION[0] + ATTENUATION[2]))
    expected = (weight[0] * np.exp(-attenuation @ TRUTH)).sum(axis=1)
    found = solve(expected[None], weight, attenuation, bias_correction=False)
    np.testing.assert_allclose(found.areal_density[0], TRUTH, rtol=1e-6)


def test_nonnegative_holds_a_material_at_zero_where_free_fit_is_negative() -> None:
    expected = (WEIGHT[0] * np.exp(-ATTENUATION @ np.array([1.0, -0.05]))).sum(axis=1)
    free = solve(expected[None], WEIGHT, ATTENUATION, bias_correction=False)
    held = solve(
        expected[None],
        WEIGHT,
        ATTENUATION,
        bias_correction=False,
        nonnegative=True,
        tolerance=1e-14,
    )
    one = solve(
        expected[None],
        WEIGHT,
        ATTENUATION[:, :1],
        bias_correction=False,
        tolerance=1e-14,
    )
    assert free.areal_density[0, 1] < 0.0
    assert held.areal_density[0, 1] == 0.0
    # With the second material at 0, the first is the one-material fit.
    np.testing.assert_allclose(
        held.areal_density[0, 0], one.areal_density[0, 0], rtol=1e-5
    )


def test_one_bin_one_energy_by_hand() -> None:
    # lambda = w exp(-mu a): the likelihood's root is ln(w / N) / mu, the corrected
    # score has q = 1 and the root ln(w / (N + 1/2)) / mu; variance (1 + 1/(2 l)) / (mu^2
    # l) at l = N + 1/2, the expansion of var ln(N + 1/2).
    w, mu, n = 1000.0, 0.5, np.array([[200.0], [3.0], [0.0]])
    weight, attenuation = np.array([[[w]]]), np.array([[mu]])
    plain = solve(n[:2], weight, attenuation, bias_correction=False, tolerance=1e-20)
    mended = solve(n, weight, attenuation, tolerance=1e-20)
    np.testing.assert_allclose(
        plain.areal_density[:, 0], np.log(w / n[:2, 0]) / mu, rtol=1e-12
    )
    half = n[:, 0] + 0.5
    np.testing.assert_allclose(
        mended.areal_density[:, 0], np.log(w / half) / mu, rtol=1e-12
    )
    share = np.minimum(0.5 / half, 0.5)  # held at one half
    np.testing.assert_allclose(
        mended.covariance[:, 0], (1.0 + share) / (mu**2 * half), rtol=1e-6
    )
    np.testing.assert_allclose(
        plain.covariance[:, 0], 1 / (mu**2 * n[:2, 0]), rtol=1e-6
    )


def test_dead_time_product_is_the_inverse_of_the_covariance() -> None:
    expected, c = np.array([30.0, 50.0, 20.0]), 0.004
    covariance = np.diag(expected) - c * np.outer(expected, expected)
    left = np.array([[1.0], [-2.0], [0.5]])
    product = inverse_covariance_product(left, left, expected, c)
    np.testing.assert_allclose(
        product, left.T @ np.linalg.inv(covariance) @ left, rtol=1e-12
    )
    bound = np.sqrt(cramer_rao_bound(fisher_information(expected, left, dead=c)))
    np.testing.assert_allclose(bound, product**-0.5, rtol=1e-12)


def test_deviance_with_dead_time_by_hand() -> None:
    # N = (0, 4), lambda = (1, 4): 2 [0 + 1] + k (4 - 5)^2, k = 0.1 / (1 - 0.5) = 0.2.
    got = deviance(np.array([0.0, 4.0]), np.array([1.0, 4.0]), dead=0.1)
    assert got == pytest.approx(2.2, rel=1e-12)


def test_joint_estimate_of_one_sample_is_the_pixel() -> None:
    pixel = solve(_counts(1), WEIGHT, ATTENUATION, dead_fraction=1e-4, tolerance=1e-20)
    joint = joint_estimate(_counts(1), WEIGHT, ATTENUATION, dead_fraction=1e-4)
    np.testing.assert_allclose(joint.areal_density, pixel.areal_density[0], rtol=1e-7)
    assert joint.deviance == pytest.approx(pixel.deviance[0], rel=1e-6)


def test_joint_estimate_of_poisson_repeats_is_the_pixel_of_their_sum() -> None:
    rng = np.random.default_rng(4)
    counts = rng.poisson(EXPECTED / 50.0, (40, 3)).astype(np.float64)
    joint = joint_estimate(counts, WEIGHT / 50.0, ATTENUATION)
    pooled = solve(
        counts.sum(axis=0)[None], WEIGHT * 40 / 50, ATTENUATION, tolerance=1e-20
    )
    np.testing.assert_allclose(joint.areal_density, pooled.areal_density[0], rtol=1e-8)
    assert joint.samples == 40
    assert joint.outcome == SolveOutcome.CONVERGED


def test_joint_estimate_says_why_there_is_none() -> None:
    counts = np.full((3, 3), np.nan)
    joint = joint_estimate(counts, WEIGHT, ATTENUATION)
    assert joint.outcome == SolveOutcome.UNUSABLE
    same = np.repeat(WEIGHT[:, :1], 3, axis=1)
    start = np.array([1.0, 0.1])
    joint = joint_estimate(_counts(), same, ATTENUATION, start=start)
    assert joint.outcome == SolveOutcome.SINGULAR
    assert np.isnan(joint.areal_density).all()


def test_start_values_lie_within_about_a_standard_error() -> None:
    rng = np.random.default_rng(8)
    truth = rng.random((2000, 2)) * np.array([3.0, 0.8])
    expected = (10.0 * WEIGHT * np.exp(-truth @ ATTENUATION.T)[:, None]).sum(axis=2)
    counts = rng.poisson(expected).astype(np.float64)
    start = StartRegression.fit(WEIGHT, ATTENUATION)
    a = start.predict(counts, WEIGHT * 10.0)
    fit = solve(counts, WEIGHT * 10.0, ATTENUATION)
    away = (a - fit.areal_density) / fit.standard_error
    assert np.sqrt((away**2).mean()) < 1.5
    assert fit.steps.mean() < 3.0
