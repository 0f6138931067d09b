"""The smooth correction of what physics leaves: found where it is, absent where not."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.calibration.residual import SIZES, ResidualCorrection, fit_residual

BINS = 4
DECAY = np.array([0.2, 0.4])
LARGEST = np.array([9.0, 3.0])


def wedge(seed: int = 1) -> tuple[np.ndarray, np.ndarray, np.random.Generator]:
    """Areal densities and currents of 5 x 5 stacks and some opens at less current."""
    rng = np.random.default_rng(seed)
    mesh = np.meshgrid(*[np.linspace(0.0, top, 5) for top in LARGEST], indexing="ij")
    steps = np.stack([m.ravel() for m in mesh], axis=1)
    areal = np.concatenate([steps, np.zeros((6, 2))])
    current = np.concatenate([np.full(25, 4.0), [4.0, 4.0, 2.0, 2.0, 1.0, 1.0]])
    return areal, current, rng


def bend(areal: np.ndarray) -> np.ndarray:
    """A planted residual: up to a percent, smooth, another one in each bin."""
    u, v = (areal / LARGEST).T
    forms = [0.01 * u, -0.008 * v, 0.006 * u * v, 0.005 * (u - v) ** 2]
    return np.stack(forms, axis=1)


def fit(
    planted: np.ndarray,
    error: float,
    areal: np.ndarray,
    current: np.ndarray,
    rng: np.random.Generator,
) -> ResidualCorrection:
    noise = rng.normal(0.0, error, planted.shape)
    return fit_residual(
        planted + noise, np.full(planted.shape, error), areal, current, DECAY
    )


def test_planted_residual_is_found_at_fresh_points() -> None:
    areal, current, rng = wedge()
    error = 1e-4
    found = fit(bend(areal), error, areal, current, rng)
    fresh = rng.uniform(0.05, 0.95, (200, 2)) * LARGEST
    left = found.log_factor(fresh, 4.0) - bend(fresh)
    # a common level may go to the drifts, whose prior is no wider than this
    assert np.sqrt(np.mean(left**2)) < 3e-4
    assert np.sqrt(np.mean(bend(fresh) ** 2)) > 3e-3
    assert found.degree >= 2


def test_noise_alone_leaves_no_correction() -> None:
    areal, current, rng = wedge()
    error = 1e-3
    found = fit(np.zeros((areal.shape[0], BINS)), error, areal, current, rng)
    fresh = rng.uniform(0.0, 1.0, (200, 2)) * LARGEST
    # an unpenalised cubic would keep the share 10/31 of the variance: 0.57 of the error
    assert np.sqrt(np.mean(found.log_factor(fresh, 4.0) ** 2)) < 0.4 * error
    assert found.size == SIZES[0]


def test_output_of_the_tube_is_told_from_the_residual() -> None:
    # what all bins of one exposure share is the tube; what one bin does is the model
    areal, current, rng = wedge(3)
    drift = np.asarray(rng.normal(0.0, 2e-3, areal.shape[0]))
    shape = bend(areal)
    shape -= shape.mean(axis=1, keepdims=True)
    found = fit(shape + drift[:, None], 1e-4, areal, current, rng)
    assert np.std(found.drift - drift) < 0.4 * np.std(drift)
    assert 1e-3 <= found.drift_spread <= 3e-3


def test_departure_with_the_rate_is_followed() -> None:
    areal, current, rng = wedge(4)
    passed = np.exp(-areal @ DECAY)
    more = np.array([0.02, -0.01, 0.01, 0.0])
    planted = ((current / 4.0 - 1.0) * passed)[:, None] * more
    found = fit(planted, 1e-4, areal, current, rng)
    assert found.reference_current_ma == 4.0
    at_half = found.log_factor(np.zeros((1, 2)), 2.0) - found.log_factor(
        np.zeros((1, 2)), 4.0
    )
    differences = at_half[0] - at_half[0, 3]
    np.testing.assert_allclose(differences, -0.5 * more, atol=1.5e-3)


def test_correction_stays_bounded_far_outside_the_steps() -> None:
    areal, current, rng = wedge()
    found = fit(bend(areal), 1e-4, areal, current, rng)
    far = np.array([[3.0, 3.0], [10.0, 0.0], [0.0, 10.0]]) * LARGEST
    assert np.abs(found.log_factor(far, 4.0)).max() < 0.2


@pytest.mark.slow
def test_stated_covariance_is_that_of_the_correction() -> None:
    # many scans of one instrument: scatter over promise, at a fresh stack
    areal, current, rng = wedge(5)
    fresh = np.array([[3.3, 1.2]])
    pulls = []
    for _ in range(6):
        found = fit(bend(areal), 5e-4, areal, current, rng)
        terms = found.terms(fresh, 4.0)[0]
        sigma = np.sqrt(np.einsum("i,bij,j->b", terms, found.covariance, terms))
        pulls.append((found.log_factor(fresh, 4.0) - bend(fresh))[0] / sigma)
    # not exactly 1: the drifts are shared and the prior is centred at 0
    assert 0.3 < np.sqrt(np.mean(np.square(pulls))) < 1.6


def test_terms_and_their_number() -> None:
    areal, current, rng = wedge()
    found = fit(bend(areal), 1e-4, areal, current, rng)
    terms = found.terms(areal, current)
    count = (found.degree + 1) * (found.degree + 2) // 2
    assert found.powers.shape == (count, 2)
    assert terms.shape == (areal.shape[0], count + 2)
    assert found.coefficient.shape == (count + 2, BINS)
    assert found.covariance.shape == (BINS, count + 2, count + 2)
    np.testing.assert_array_equal(terms[:, 0], 1.0)
    assert not terms[current == 4.0, -2:].any()


def test_few_exposures_get_a_plain_correction() -> None:
    areal = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    found = fit_residual(
        np.zeros((3, 2)), np.full((3, 2), 1e-3), areal, np.ones(3), DECAY
    )
    assert found.degree == 1
    assert np.all(np.isfinite(found.coefficient))
