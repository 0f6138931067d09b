"""The solver against independent computation: SciPy's optimisers and distributions."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import optimize, stats

from spectral.decomposition.joint_estimate import joint_estimate
from spectral.decomposition.likelihood import (
    count_derivatives,
    cramer_rao_bound,
    deviance,
    expected_counts,
    fisher_information,
)
from spectral.decomposition.solver import Solution, solve

Array = NDArray[np.float64]
pytestmark = pytest.mark.reference

ENERGY = np.linspace(22.0, 118.0, 12)
ATTENUATION = np.stack(
    (
        0.18 + 0.8 * (20.0 / ENERGY) ** 3,
        0.15 + 6.0 * (20.0 / ENERGY) ** 3,
        np.where(ENERGY > 33.0, 40.0, 8.0) * (33.0 / ENERGY) ** 2.7,
    ),
    axis=1,
)


def _weight(counts: float, materials: int) -> Array:
    """Made-up spectrum seen through five overlapping bins."""
    edges = np.array([20.0, 35.0, 50.0, 62.0, 78.0])
    if materials == 3:
        edges = np.append(edges, 95.0)
    above = 1.0 / (1.0 + np.exp((edges[:, None] - ENERGY) / 3.0))
    share = np.vstack((above[:-1] - above[1:], above[-1:])) * (120.0 - ENERGY)
    return np.asarray(counts * share / share.sum())


def _optimum(counts: Array, weight: Array, attenuation: Array, c: float) -> Array:
    """Minimum of a function whose slope is minus the quasi-score, by Nelder-Mead.

    Without dead time that is the deviance. With it, x' C^-1 x is integrated: k depends
    on the sum of lambda alone, so the extra term is a function of that sum S, with
    derivative -k(S) (N - S): c/(1 - c S) (S - N) dS integrates to
    -(S - N) - (1/c)(1 - c N) ln(1 - c S) + const.
    """
    total = counts.sum()

    def loss(a: Array) -> float:
        expected = expected_counts(a, weight, attenuation)
        if (expected <= 0.0).any() or c * expected.sum() >= 1.0:
            return 1e300
        value = 0.5 * float(deviance(counts, expected))
        if c > 0.0:
            s = expected.sum()
            value += -(s - total) - (1.0 - c * total) / c * np.log1p(-c * s)
        return value

    scale = np.array([1.0, 0.2, 0.01])[: attenuation.shape[1]]
    found = scale.copy()
    for _ in range(4):
        found = optimize.minimize(
            lambda z: loss(z * scale),
            found / scale,
            method="Nelder-Mead",
            options={"xatol": 1e-10, "fatol": 1e-13, "maxiter": 8000, "maxfev": 8000},
        ).x
        found = found * scale
    return np.asarray(found)


@pytest.mark.parametrize("materials", [1, 2, 3])
@pytest.mark.parametrize("c", [0.0, 3e-5])
def test_same_root_as_a_search_without_derivatives(materials: int, c: float) -> None:
    rng = np.random.default_rng(materials)
    attenuation = ATTENUATION[:, :materials]
    weight = _weight(2e4, materials)
    truth = np.array([2.0, 0.3, 0.005])[:materials]
    counts = rng.poisson(expected_counts(truth, weight, attenuation), (4, len(weight)))
    found = solve(
        counts,
        weight[None],
        attenuation,
        dead_fraction=c,
        bias_correction=False,
        tolerance=1e-20,
    )
    for k in range(4):
        reference = _optimum(counts[k].astype(float), weight, attenuation, c)
        away = (found.areal_density[k] - reference) / found.standard_error[k]
        # The minimum is flat: 1e-13 of the loss is 5e-7 standard errors.
        np.testing.assert_allclose(away, 0.0, atol=2e-5)


def test_same_fit_as_scipy_with_bounds() -> None:
    rng = np.random.default_rng(6)
    weight, attenuation = _weight(3000.0, 2), ATTENUATION[:, :2]
    truth = np.array([1.0, 0.0])
    counts = rng.poisson(expected_counts(truth, weight, attenuation), (12, 5))
    held = solve(
        counts,
        weight[None],
        attenuation,
        bias_correction=False,
        nonnegative=True,
        tolerance=1e-20,
    )

    def loss(a: Array, n: Array) -> float:
        return float(deviance(n, expected_counts(a, weight, attenuation)))

    for k in range(12):
        reference = optimize.minimize(
            loss,
            np.array([1.0, 0.1]),
            args=(counts[k].astype(float),),
            method="L-BFGS-B",
            bounds=[(0.0, None)] * 2,
            options={"ftol": 1e-15, "gtol": 1e-9},
        ).x
        away = (held.areal_density[k] - reference) / held.standard_error[k]
        np.testing.assert_allclose(away, 0.0, atol=2e-3)  # L-BFGS-B's own error
    assert (held.areal_density[:, 1] == 0.0).any()


def test_corrected_root_solves_the_moved_score() -> None:
    # Firth 1993, Biometrika 80:27: U(a) - F b(a) = 0 with Cox & Snell's bias
    # b = -1/2 F^-1 sum_b (d_b / lambda_b) trace(F^-1 h_b), by SciPy's root finder.
    weight, attenuation = _weight(2000.0, 2), ATTENUATION[:, :2]
    rng = np.random.default_rng(2)
    counts = rng.poisson(
        expected_counts(np.array([3.0, 0.3]), weight, attenuation), (5, 5)
    )

    def score(a: Array, n: Array) -> Array:
        expected = expected_counts(a, weight, attenuation)
        slope, curve = count_derivatives(a, weight, attenuation)
        inverse = np.linalg.inv(slope.T @ (slope / expected[:, None]))
        trace = np.array([np.trace(inverse @ h) for h in curve])
        return np.asarray(slope.T @ ((n - expected + 0.5 * trace) / expected))

    found = solve(counts, weight[None], attenuation, tolerance=1e-20)
    for k in range(5):
        root = optimize.root(score, [3.0, 0.3], args=(counts[k],), tol=1e-12)
        np.testing.assert_allclose(found.areal_density[k], root.x, rtol=1e-7)


def test_derivatives_match_differences() -> None:
    weight, attenuation = _weight(1e4, 3), ATTENUATION
    a, h = np.array([2.0, 0.3, 0.01]), np.array([1e-4, 1e-4, 1e-5])
    slope, curve = count_derivatives(a, weight, attenuation)
    for j in range(3):
        d = np.eye(3)[j] * h[j]
        up, down = (expected_counts(a + s * d, weight, attenuation) for s in (1, -1))
        np.testing.assert_allclose((up - down) / (2 * h[j]), slope[:, j], rtol=1e-5)
        steep, shallow = (
            count_derivatives(a + s * d, weight, attenuation)[0] for s in (1, -1)
        )
        np.testing.assert_allclose(
            (steep - shallow) / (2 * h[j]), curve[:, j], rtol=1e-5
        )


def test_covariance_is_the_bound_at_the_estimate() -> None:
    weight, attenuation = _weight(1e6, 3), ATTENUATION
    truth = np.array([2.0, 0.3, 0.01])
    counts = expected_counts(truth, weight, attenuation)
    found = solve(
        counts[None], weight[None], attenuation, dead_fraction=1e-6, tolerance=1e-20
    )
    slope = count_derivatives(truth, weight, attenuation)[0]
    bound = cramer_rao_bound(fisher_information(counts, slope, dead=1e-6))
    # The curvature's share is of the order of 1 / counts.
    np.testing.assert_allclose(
        found.covariance[0], bound[np.triu_indices(3)], rtol=2e-3
    )


@pytest.mark.parametrize("mean", [4.0, 10.0, 60.0])
def test_one_bin_bias_and_variance_summed_over_the_poisson_law(mean: float) -> None:
    # ln(N + 1/2) is nearly unbiased for ln(lambda) and has variance
    # 1/l + 1/(2 l^2) + ...: J. B. S. Haldane 1956, Ann. Hum. Genet. 20:309, and
    # F. J. Anscombe 1956, Biometrika 43:461 (from memory). Checked by summing over
    # scipy.stats.poisson, not by drawing.
    w, mu = 1000.0, 0.4
    n = np.arange(0.0, 400.0)
    p = stats.poisson.pmf(n, mean)
    found = solve(n[:, None], np.array([[[w]]]), np.array([[mu]]), tolerance=1e-20)
    a = found.areal_density[:, 0]
    truth, sigma = np.log(w / mean) / mu, 1.0 / (mu * np.sqrt(mean))
    bias = (p @ a - truth) / sigma
    spread = np.sqrt(p @ (a - p @ a) ** 2)
    told = np.sqrt(p @ found.covariance[:, 0])
    assert abs(bias) < 0.05 * 4.0 / mean
    # One bin alone: the error told is on the safe side by about 1 / (4 lambda).
    assert 1.0 - 0.6 / mean < spread / told < 1.0
    plain = solve(
        n[1:, None], np.array([[[w]]]), np.array([[mu]]), bias_correction=False
    )
    raw = (p[1:] @ plain.areal_density[:, 0] / p[1:].sum() - truth) / sigma
    assert abs(raw) > 5.0 * abs(bias)


def _draw(
    truth: Array, counts: float, trials: int, seed: int, *, corrected: bool
) -> tuple[Solution, Array]:
    """Repeated fits of one object, and the bound's standard errors."""
    materials = len(truth)
    attenuation = ATTENUATION[:, :materials]
    weight = _weight(1.0, materials)
    expected = expected_counts(truth, weight, attenuation)
    weight, expected = (
        weight * counts / expected.sum(),
        expected * counts / expected.sum(),
    )
    slope = count_derivatives(truth, weight, attenuation)[0]
    bound = np.sqrt(np.diag(cramer_rao_bound(fisher_information(expected, slope))))
    drawn = np.random.default_rng(seed).poisson(expected, (trials, len(expected)))
    found = solve(drawn, weight[None], attenuation, bias_correction=corrected)
    return found, bound


@pytest.mark.slow
@pytest.mark.parametrize(
    ("truth", "counts"),
    [
        (np.array([2.0, 0.5]), 5e3),
        (np.array([8.0, 0.2]), 5e4),
        (np.array([2.0, 0.3, 0.02]), 2e5),
    ],
)
@pytest.mark.parametrize("corrected", [False, True])
def test_estimates_attain_the_bound(
    truth: Array, counts: float, corrected: bool
) -> None:
    # Roessl & Herrmann 2009, Phys. Med. Biol. 54:1307 (from memory): maximum
    # likelihood attains the Cramer-Rao bound at imaging count levels.
    trials = 30_000
    found, bound = _draw(truth, counts, trials, 5, corrected=corrected)
    error = found.areal_density - truth
    assert (found.outcome == 0).all()
    # Four standard errors of an rms over the trials, and 0.5 % for the second order.
    slack = 4.0 / np.sqrt(2 * trials) + 0.005
    rmse = np.sqrt((error**2).mean(axis=0))
    np.testing.assert_allclose(rmse / bound, 1.0, atol=slack)
    pull = error / found.standard_error
    np.testing.assert_allclose(pull.std(axis=0), 1.0, atol=slack)
    bias = error.mean(axis=0) / bound
    np.testing.assert_allclose(bias, 0.0, atol=4.0 / np.sqrt(trials) + 0.03)


@pytest.mark.slow
@pytest.mark.parametrize("counts", [60.0, 100.0, 300.0])
@pytest.mark.parametrize("truth", [np.array([2.0, 0.5]), np.array([6.0, 0.2])])
def test_few_counts_leave_no_bias_that_matters(truth: Array, counts: float) -> None:
    trials = 40_000
    found, bound = _draw(truth, counts, trials, 7, corrected=True)
    error = found.areal_density - truth
    noise = 4.0 / np.sqrt(trials)
    assert np.isfinite(error).all()
    assert np.abs(error.mean(axis=0) / bound).max() < 0.02 + noise
    assert (np.sqrt((error**2).mean(axis=0)) / bound).max() < 1.10
    # Scatter over repeats against the error told, both as rms.
    told = np.sqrt((found.standard_error**2).mean(axis=0))
    np.testing.assert_allclose(error.std(axis=0) / told, 1.0, atol=0.04)
    plain, _ = _draw(truth, counts, trials, 7, corrected=False)
    raw = (plain.areal_density - truth).mean(axis=0) / bound
    assert np.abs(raw).max() > 0.05


@pytest.mark.slow
def test_joint_estimate_at_one_count_per_pixel() -> None:
    weight, attenuation = _weight(1.0, 2)[None], ATTENUATION[:, :2]
    truth = np.array([2.0, 0.3])
    rng = np.random.default_rng(9)
    weight = weight * rng.uniform(5.0, 15.0, (300, 1, 1))
    expected = expected_counts(truth, weight, attenuation)
    pulls = []
    for _ in range(200):
        found = joint_estimate(rng.poisson(expected), weight, attenuation)
        error = np.sqrt(np.diag(found.covariance))
        pulls.append((found.areal_density - truth) / error)
    assert expected.sum(axis=1).mean() < 5.0
    np.testing.assert_allclose(np.mean(pulls, axis=0), 0.0, atol=4 / np.sqrt(200))
    np.testing.assert_allclose(np.std(pulls, axis=0), 1.0, atol=4 / np.sqrt(400))


@pytest.mark.slow
def test_pulls_behind_a_dead_time_have_width_one() -> None:
    # Arrivals are drawn one by one; a paralysable counter records those with no
    # arrival within the dead time before. Yu & Fessler 2000, Phys. Med. Biol. 45:2043
    # (from memory): variance below the mean by (2 x - x^2) mean^2, x = tau / T.
    rng = np.random.default_rng(11)
    trials, rate, tau = 20_000, 400.0, 1e-3  # count time 1: rate x dead time = 0.4
    c = 2.0 * tau - tau**2
    arrivals = np.cumsum(rng.exponential(1.0 / rate, (trials, 640)), axis=1) - 0.1
    gap = np.diff(arrivals, axis=1)
    assert arrivals[:, -1].min() > 1.0
    seen = (gap > tau) & (arrivals[:, 1:] > 0.0) & (arrivals[:, 1:] < 1.0)
    total = seen.sum(axis=1)
    mean = rate * np.exp(-rate * tau)
    assert total.mean() == pytest.approx(mean, rel=0.003)
    assert total.var() == pytest.approx(mean - c * mean**2, rel=0.05)
    attenuation = ATTENUATION[:, :2]
    truth = np.array([2.0, 0.4])
    weight = _weight(1.0, 2)
    expected = expected_counts(truth, weight, attenuation)
    share = expected / expected.sum()
    counts = rng.multinomial(total, share)
    weight = weight * mean / expected.sum()
    sd = []
    for dead in (c, 0.0):
        found = solve(counts, weight[None], attenuation, dead_fraction=dead)
        told = np.sqrt((found.covariance[:, [0, 2]]).mean(axis=0))
        sd.append((found.areal_density - truth).std(axis=0) / told)
    np.testing.assert_allclose(sd[0], 1.0, atol=0.03)
    assert sd[1].min() < 0.9  # Poisson errors would be too large
