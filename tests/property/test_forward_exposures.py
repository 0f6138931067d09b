"""Facts of the trade about exposures and their length, asked of the whole model.

Counts are drawn from the forward model that also decomposes them, so these checks are
of consistency: they would not find a wrong cross section.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.decomposition.likelihood import (
    count_derivatives,
    cramer_rao_bound,
    expected_counts,
    fisher_information,
)
from spectral.decomposition.responses import lost_fraction, responses
from spectral.decomposition.solver import solve

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration

pytestmark = [pytest.mark.property, pytest.mark.slow]

PIXELS = (40, 50)
FLAT = np.arange(2000)
TRUTH = np.array([4.5, 1.2])
CURRENT_MA = 1.0
SHORT_S = 0.02


@pytest.fixture(scope="module")
def response(
    make_calibration: Callable[..., Calibration],
) -> tuple[np.ndarray, np.ndarray]:
    """Counts per second of each pixel's nodes, and the nodes' attenuation."""
    made = make_calibration(PIXELS)
    ready = responses(made, made.nodes(CURRENT_MA), FLAT, count_time_s=1.0)
    return ready.weight, ready.attenuation


def estimates(
    response: tuple[np.ndarray, np.ndarray], counts: np.ndarray, time_s: float
) -> tuple[np.ndarray, np.ndarray]:
    """Areal densities and their stated errors, shape (pixel, material)."""
    weight, attenuation = response
    found = solve(counts, weight * time_s, attenuation, start=np.array([4.0, 1.0]))
    return found.areal_density, found.standard_error


def expected(response: tuple[np.ndarray, np.ndarray], time_s: float) -> np.ndarray:
    weight, attenuation = response
    return expected_counts(TRUTH, weight * time_s, attenuation)


def test_ten_exposures_summed_are_one_of_ten_times_the_length(
    response: tuple[np.ndarray, np.ndarray],
) -> None:
    # counts of the same photons add exactly (common practice, no source)
    rng = np.random.default_rng(1)
    mean = expected(response, SHORT_S)
    ten = rng.poisson(mean, (10, *mean.shape)).astype(float)
    summed, error = estimates(response, ten.sum(axis=0), 10 * SHORT_S)
    long, long_error = estimates(
        response, rng.poisson(10 * mean).astype(float), 10 * SHORT_S
    )
    np.testing.assert_allclose(error.mean(0), long_error.mean(0), rtol=0.01)
    sem = np.sqrt(2.0 / FLAT.size) * error.mean(axis=0)
    assert np.all(np.abs(summed.mean(axis=0) - long.mean(axis=0)) < 4.0 * sem)
    # a standard deviation of 2000 draws is known to 1.6 %, a ratio of two to 2.2 %
    np.testing.assert_allclose(summed.std(axis=0) / long.std(axis=0), 1.0, atol=0.09)
    # and the mean of ten decompositions is the decomposition of the sum, but for what
    # each of them is not linear in its counts
    single = np.mean([estimates(response, c, SHORT_S)[0] for c in ten], axis=0)
    assert np.all(np.abs(single - summed).mean(axis=0) < 0.3 * error.mean(axis=0))


def test_estimates_stay_true_from_short_to_long_exposures(
    response: tuple[np.ndarray, np.ndarray],
) -> None:
    # at one rate the error falls as the square root of the time and the mean stays
    # (common practice, no source)
    rng = np.random.default_rng(2)
    scaled = []
    for factor in (1, 10, 100):
        time = SHORT_S * factor
        counts = rng.poisson(expected(response, time)).astype(float)
        found, stated = estimates(response, counts, time)
        spread = found.std(axis=0)
        offset = found.mean(axis=0) - TRUTH
        assert np.all(np.abs(offset) < 4.0 * spread / np.sqrt(FLAT.size)), factor
        np.testing.assert_allclose(spread / stated.mean(axis=0), 1.0, atol=0.07)
        scaled.append(spread * np.sqrt(factor))
    np.testing.assert_allclose(scaled[0] / scaled[2], 1.0, atol=0.1)
    np.testing.assert_allclose(scaled[1] / scaled[2], 1.0, atol=0.1)


def test_spread_of_the_estimates_is_the_smallest_there_can_be(
    response: tuple[np.ndarray, np.ndarray],
) -> None:
    # bound of Cramer 1946 and Rao 1945, worked out from the mean counts
    rng = np.random.default_rng(3)
    weight, attenuation = response
    mean = expected(response, 10 * SHORT_S)
    slope, _ = count_derivatives(TRUTH, weight * 10 * SHORT_S, attenuation)
    bound = cramer_rao_bound(fisher_information(mean, slope))
    found, _ = estimates(response, rng.poisson(mean).astype(float), 10 * SHORT_S)
    pulls = (found - TRUTH) / np.sqrt(np.diagonal(bound, axis1=1, axis2=2))
    np.testing.assert_allclose(pulls.std(axis=0), 1.0, atol=5 / np.sqrt(2 * 2000))
    np.testing.assert_allclose(pulls.mean(axis=0), 0.0, atol=5 / np.sqrt(2000))


def test_expected_counts_are_proportional_to_time_and_to_nothing_else(
    response: tuple[np.ndarray, np.ndarray],
    make_calibration: Callable[..., Calibration],
) -> None:
    made = make_calibration(PIXELS)
    tables = made.nodes(CURRENT_MA)
    ten = responses(made, tables, FLAT[:5], count_time_s=10.0)
    np.testing.assert_allclose(ten.weight, 10.0 * response[0][:5], rtol=1e-12)
    assert ten.lost_fraction == lost_fraction(made.dead_time_ns, 10.0)


def test_share_lost_to_dead_time_makes_counts_less_variable() -> None:
    # exact variance of the paralysable counter, D. F. Yu, J. A. Fessler, Phys. Med.
    # Biol. 45 (2000) 2043: m T (1 - (2 x - x tau/T) exp(-x)), m = n exp(-x): the
    # coefficient c of var = l - c l^2 is 2 tau/T - (tau/T)^2
    tau, time, rate = 200e-9, 1e-3, 2e6
    x = rate * tau
    mean = rate * np.exp(-x) * time
    variance = mean * (1.0 - (2.0 * x - x * tau / time) * np.exp(-x))
    found = mean - lost_fraction(200.0, time) * mean**2
    assert found == pytest.approx(variance, rel=1e-12)


def test_brighter_beam_is_met_without_new_tables(
    make_calibration: Callable[..., Calibration],
) -> None:
    # the responses serve outputs a few percent from the tables' own
    made = make_calibration((2, 3))
    flat, areal = np.arange(6), np.array([[3.0, 1.0], [0.0, 0.0], [8.0, 2.5]])
    ready = responses(made, made.nodes(4.0), flat, count_time_s=1.0, output=1.025)
    found = np.einsum("pbn,cn->pcb", ready.weight, np.exp(-areal @ ready.attenuation.T))
    exact = made.expected_bins(areal, np.full(3, 4.0), np.full(3, 1.025), flat)
    np.testing.assert_allclose(found, exact, rtol=1e-3)
