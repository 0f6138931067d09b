"""The compiled kernel against its NumPy twin, and its exponential and logarithm."""

from __future__ import annotations

import numpy as np
import pytest
from numba import njit
from numpy.typing import NDArray

from spectral.decomposition import solver
from spectral.kernels import fisher_scoring, fisher_scoring_numpy
from spectral.kernels.elementary import exponential, logarithm

Array = NDArray[np.float64]
Real = NDArray[np.float64] | NDArray[np.float32]


@njit(error_model="numpy")
def _both(x: Real, y: Real, e: Real, ln: Real) -> None:
    for i in range(x.size):
        e[i] = exponential(x[i])
        ln[i] = logarithm(y[i])


def test_exponential_and_logarithm_match_numpy() -> None:
    x = np.linspace(-699.0, 699.0, 200_001)
    y = np.concatenate((np.logspace(-300, 300, 100_001), np.linspace(0.5, 2, 100_000)))
    e, ln = np.empty_like(x), np.empty_like(y)
    _both(x, y, e, ln)
    np.testing.assert_allclose(e, np.exp(x), rtol=4e-16)
    np.testing.assert_allclose(ln, np.log(y), rtol=4e-16, atol=3e-16)


def test_single_precision_functions_match_numpy() -> None:
    x = np.linspace(-86.0, 86.0, 200_001).astype(np.float32)
    y = np.concatenate((np.logspace(-30, 30, 100_001), np.linspace(0.5, 2, 100_000)))
    y = y.astype(np.float32)
    e, ln = np.empty_like(x), np.empty_like(y)
    _both(x, y, e, ln)
    np.testing.assert_allclose(e, np.exp(x.astype(np.float64)), rtol=2e-7)
    exact = np.log(y.astype(np.float64))
    np.testing.assert_allclose(ln, exact, rtol=2e-7, atol=2e-7)


def test_exponential_is_held_within_the_range_of_doubles() -> None:
    x = np.array([-1e300, -701.0, 701.0, 1e300])
    e, ln = np.empty_like(x), np.empty_like(x)
    _both(x, np.ones(4), e, ln)
    np.testing.assert_allclose(e, np.exp([-700.0, -700.0, 700.0, 700.0]), rtol=1e-13)


def _scene(materials: int, nodes: int, counts: float) -> tuple[Array, Array, Array]:
    """Smooth made-up spectrum, overlapping bins, cubic-law attenuation."""
    rng = np.random.default_rng(materials * 100 + nodes)
    energy = np.linspace(20.0, 110.0, nodes)
    spectrum = (120.0 - energy) * np.exp(-((25.0 / energy) ** 3))
    edges = np.linspace(20.0, 95.0, 6)
    above = 1.0 / (1.0 + np.exp((edges[:, None] - energy) / 4.0))
    share = np.vstack((above[:-1] - above[1:], above[-1:])) * spectrum
    attenuation = np.stack(
        (
            0.18 + 0.8 * (20.0 / energy) ** 3,
            0.15 + 6.0 * (20.0 / energy) ** 3,
            np.where(energy > 40.0, 30.0, 6.0) * (30.0 / energy) ** 2.7,
        ),
        axis=1,
    )[:, :materials]
    pixels = 150  # more than two blocks, the last one part-filled
    spread = 1.0 + 0.1 * rng.normal(size=(pixels, 6, 1))
    weight = 10.0 * counts * share / share.sum() * spread
    truth = np.array([4.0, 0.4, 0.02])[:materials] * rng.random((pixels, materials))
    expected = (weight * np.exp(-truth @ attenuation.T)[:, None]).sum(axis=2)
    return rng.poisson(expected).astype(np.float64), weight, attenuation


@pytest.mark.parametrize("materials", [1, 2, 3])
@pytest.mark.parametrize("nodes", [13, 16])
@pytest.mark.parametrize("counts", [60.0, 1e5])
@pytest.mark.parametrize("corrected", [False, True])
@pytest.mark.parametrize("nonnegative", [False, True])
def test_twin_takes_the_same_steps(
    materials: int,
    nodes: int,
    counts: float,
    corrected: bool,
    nonnegative: bool,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    n, weight, attenuation = _scene(materials, nodes, counts)
    n[3, 1], n[4, 0], weight[7] = np.nan, -1.0, 0.0
    n[10] = 0.0
    dead = 0.2 / n[:, :].sum(axis=1, where=np.isfinite(n)).clip(1.0)
    found = []
    for kernel in (fisher_scoring, fisher_scoring_numpy):
        monkeypatch.setattr(solver, "fisher_scoring", kernel)
        found.append(
            solver.solve(
                n,
                weight,
                attenuation,
                dead_fraction=dead,
                bias_correction=corrected,
                nonnegative=nonnegative,
            )
        )
    ours, twin = found
    np.testing.assert_array_equal(ours.outcome, twin.outcome)
    np.testing.assert_array_equal(ours.steps, twin.steps)
    # The two sum in another order; 3 materials at few counts are near-singular.
    scale = twin.standard_error
    np.testing.assert_allclose(
        ours.areal_density / scale, twin.areal_density / scale, rtol=1e-9, atol=1e-9
    )
    np.testing.assert_allclose(ours.deviance, twin.deviance, rtol=1e-8, atol=1e-8)
    diagonal = twin.covariance[:, [0]] + 0.0
    np.testing.assert_allclose(
        ours.covariance / diagonal, twin.covariance / diagonal, rtol=1e-7, atol=1e-9
    )
    assert (ours.outcome[[3, 4, 7]] == solver.SolveOutcome.UNUSABLE).all()
    assert np.isnan(ours.areal_density[[3, 4, 7]]).all()


def test_twin_agrees_for_one_shared_weight_and_given_starts(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    n, weight, attenuation = _scene(2, 16, 1e4)
    start = np.linspace(0.0, 3.0, 2 * len(n)).reshape(-1, 2)
    ours = solver.solve(n, weight[:1], attenuation, start=start)
    monkeypatch.setattr(solver, "fisher_scoring", fisher_scoring_numpy)
    twin = solver.solve(n, weight[:1], attenuation, start=start)
    np.testing.assert_array_equal(ours.steps, twin.steps)
    np.testing.assert_allclose(ours.areal_density, twin.areal_density, rtol=1e-9)


@pytest.mark.parametrize("materials", [2, 3])
@pytest.mark.parametrize("counts", [60.0, 1e4, 1e6])
def test_single_precision_costs_no_accuracy(materials: int, counts: float) -> None:
    n, weight, attenuation = _scene(materials, 16, counts)
    exact = solver.solve(n, weight, attenuation)
    single = solver.solve(n, weight.astype(np.float32), attenuation)
    # 6e-8 of 1e6 counts is 6e-5 standard errors of one bin; the bins' differences
    # tell materials apart with a smaller lever
    good = exact.outcome == solver.SolveOutcome.CONVERGED
    shift = (single.areal_density - exact.areal_density) / exact.standard_error
    assert np.abs(shift[good]).max() < 0.01
    assert np.sqrt((shift[good] ** 2).mean()) < 1e-3
    np.testing.assert_allclose(
        single.standard_error[good], exact.standard_error[good], rtol=2e-3
    )
    np.testing.assert_allclose(single.deviance[good], exact.deviance[good], atol=0.02)
    assert good.mean() > 0.9
    assert (single.outcome[good] == exact.outcome[good]).mean() > 0.99
