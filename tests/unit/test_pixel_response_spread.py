"""The spread between pixels, learned from all of them, and each pixel's share of it."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.calibration.pixel_fit import learned_spread, posterior, prior_spread


def drawn(
    spread: np.ndarray, information: np.ndarray, pixels: int, seed: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """True departures, and the quadratic form that a wedge scan makes of them."""
    rng = np.random.default_rng(seed)
    truth = rng.multivariate_normal(np.zeros(len(spread)), spread, pixels)
    root = np.linalg.cholesky(information)
    noise = rng.standard_normal(truth.shape) @ root.T
    return truth, np.tile(information, (pixels, 1, 1)), truth @ information + noise


SPREAD = np.array([[0.25, 0.1, 0.0], [0.1, 0.16, 0.0], [0.0, 0.0, 0.0004]])
INFORMATION = np.array([[20.0, 5.0, 0.0], [5.0, 15.0, 1.0], [0.0, 1.0, 4e3]])


def test_planted_spread_is_recovered() -> None:
    _, information, pull = drawn(SPREAD, INFORMATION, 6000, 1)
    found = learned_spread(information, pull, np.diag([1.0, 1.0, 0.01]))
    # a variance from 6000 pixels is known to 2 %, here more as the data blur it; and
    # the few largest departures are left out
    np.testing.assert_allclose(np.diag(found), np.diag(SPREAD), rtol=0.08)
    assert found[0, 1] == pytest.approx(SPREAD[0, 1], rel=0.1)
    np.testing.assert_allclose(found, found.T)


def test_where_to_start_does_not_matter() -> None:
    _, information, pull = drawn(SPREAD, INFORMATION, 2000, 2)
    wide = learned_spread(information, pull, np.diag([4.0, 4.0, 0.01]), rounds=300)
    narrow = learned_spread(information, pull, np.diag([0.05, 0.05, 1e-4]), rounds=300)
    np.testing.assert_allclose(np.diag(wide), np.diag(narrow), rtol=0.05)


def test_pixels_that_are_alike_have_no_spread() -> None:
    none = np.diag([1e-12, 1e-12, 1e-12])
    _, information, pull = drawn(none, INFORMATION, 4000, 3)
    found = learned_spread(information, pull, np.diag([0.1, 0.1, 1e-3]), rounds=400)
    # far below what one pixel's data could tell (variances 0.05, 0.07, 2.5e-4)
    assert np.all(np.diag(found) < 0.1 * np.diag(np.linalg.inv(INFORMATION)))


def test_a_few_sick_pixels_do_not_widen_it() -> None:
    _, information, pull = drawn(SPREAD, INFORMATION, 5000, 4)
    pull[:15] += 40.0 * INFORMATION[0]
    found = learned_spread(information, pull, np.diag([1.0, 1.0, 0.01]))
    assert found[0, 0] == pytest.approx(SPREAD[0, 0], rel=0.12)


def test_posterior_errors_are_those_of_the_pixels() -> None:
    truth, information, pull = drawn(SPREAD, INFORMATION, 5000, 5)
    mean, covariance = posterior(information, pull, SPREAD)
    pulls = (mean - truth) / np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))
    np.testing.assert_allclose(pulls.mean(axis=0), 0.0, atol=5 / np.sqrt(5000))
    np.testing.assert_allclose(pulls.std(axis=0), 1.0, atol=5 / np.sqrt(2 * 5000))
    # James & Stein: nearer to the truth than each pixel by itself
    alone = np.linalg.solve(information, pull[..., None])[..., 0]
    assert np.all(np.mean((mean - truth) ** 2, 0) < np.mean((alone - truth) ** 2, 0))


def test_no_data_leave_the_spread() -> None:
    nothing = np.zeros((4, 3, 3))
    mean, covariance = posterior(nothing, np.zeros((4, 3)), SPREAD)
    assert not mean.any()
    np.testing.assert_allclose(covariance, np.tile(SPREAD, (4, 1, 1)))


def test_start_has_one_entry_for_each_departure() -> None:
    start = prior_spread(4)
    assert start.shape == (7, 7)
    np.testing.assert_allclose(np.sqrt(np.diag(start))[1:5], 1.5)
