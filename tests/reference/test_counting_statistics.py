"""Dead time and dispersion against published examples and a simulated counter."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.physics.counting import (
    CountingModel,
    bin_covariance,
    mean_counts,
    recorded_rate,
    two_source_dead_time,
    variance_counts,
)
from spectral.physics.statistics import dispersion, dispersion_limits, log_counts

pytestmark = pytest.mark.reference


def test_two_source_method_gives_the_published_example() -> None:
    # A university laboratory report on G. F. Knoll's formula prints 823, 440, 1164 and
    # 13 counts per second and 1.345e-4 s; without background 1.497e-4 s.
    assert two_source_dead_time(823, 440, 1164, 13) == pytest.approx(1.345e-4, abs=5e-8)
    assert two_source_dead_time(823, 440, 1164) == pytest.approx(1.497e-4, abs=5e-8)


@pytest.mark.parametrize("dead_time_s", [1e-6, 5e-6, 50e-6, 200e-6])
def test_two_source_method_finds_the_dead_time_put_in(dead_time_s: float) -> None:
    one, two, background = 8000.0, 6000.0, 50.0
    true = np.array(
        [one + background, two + background, one + two + background, background]
    )
    recorded = recorded_rate(true, dead_time_s, model="non-paralyzable")
    found = two_source_dead_time(*(float(rate) for rate in recorded))
    assert found == pytest.approx(dead_time_s, rel=1e-9)


def simulated_counts(
    model: CountingModel, x: float, time: float, trials: int, rng: np.random.Generator
) -> np.ndarray:
    """Counts in `time` dead times of a counter that has run for 30 dead times."""
    warm = 30.0
    end = warm + time
    number = int(x * end + 8.0 * np.sqrt(x * end) + 20.0)
    arrivals = np.cumsum(rng.exponential(1.0 / x, size=(trials, number)), axis=1)
    assert arrivals[:, -1].min() > end
    if model == "paralyzable":
        free = np.diff(arrivals, axis=1, prepend=-1.0) > 1.0
    else:
        free = np.zeros(arrivals.shape, dtype=bool)
        ready = np.zeros(trials)
        for k in range(number):
            free[:, k] = arrivals[:, k] >= ready
            ready = np.where(free[:, k], arrivals[:, k] + 1.0, ready)
    counted = free & (arrivals > warm) & (arrivals <= end)
    return np.asarray(np.sum(counted, axis=1))


@pytest.mark.slow
@pytest.mark.parametrize("model", ["paralyzable", "non-paralyzable"])
@pytest.mark.parametrize(("x", "time"), [(0.1, 20.0), (0.5, 5.0), (1.0, 5.0)])
def test_mean_and_variance_are_those_of_a_simulated_counter(
    model: CountingModel, x: float, time: float
) -> None:
    # Dead time 1, so the rate is x. 60 000 trials: the variance's standard error is
    # 0.6 %; without the finite-time terms it would be off by 20 % and more at x = 1.
    trials = 60_000
    counts = simulated_counts(model, x, time, trials, np.random.default_rng(20))
    mean = float(mean_counts(x, time, 1.0, model=model))
    variance = float(variance_counts(x, time, 1.0, model=model))
    error = np.sqrt(variance / trials)
    assert counts.mean() == pytest.approx(mean, abs=4.0 * error)
    assert counts.var(ddof=1) == pytest.approx(variance, rel=0.025)


def test_bin_covariance_is_that_of_sorted_pulses() -> None:
    rng = np.random.default_rng(5)
    share = np.array([0.5, 0.3, 0.2])
    totals = simulated_counts("paralyzable", 0.5, 20.0, 40_000, rng)
    sorted_counts = rng.multinomial(totals, share)
    mean = mean_counts(0.5, 20.0, 1.0, model="paralyzable")
    variance = variance_counts(0.5, 20.0, 1.0, model="paralyzable")
    expected = bin_covariance(mean, variance, share)
    # 40 000 trials: 0.7 % on variances, 0.5 % of them on covariances.
    np.testing.assert_allclose(
        np.cov(sorted_counts.T), expected, atol=0.03 * expected.max()
    )


@pytest.mark.parametrize(
    ("repeats", "low", "high"),
    # chi-square quantiles over degrees of freedom, as any printed table of the
    # 2.5 % and 97.5 % points gives them: 9 degrees 2.700 and 19.023, 19 degrees 8.907
    # and 32.852, 49 degrees 31.555 and 70.222.
    [
        (10, 2.700 / 9, 19.023 / 9),
        (20, 8.907 / 19, 32.852 / 19),
        (50, 31.555 / 49, 70.222 / 49),
    ],
)
def test_dispersion_limits_are_chi_square_points(
    repeats: int, low: float, high: float
) -> None:
    assert dispersion_limits(repeats) == pytest.approx((low, high), rel=3e-4)


@pytest.mark.slow
def test_dispersion_of_poisson_counts_stays_inside_its_limits() -> None:
    rng = np.random.default_rng(1)
    low, high = dispersion_limits(20)
    index = dispersion(rng.poisson(200.0, size=(20, 20_000))).index
    outside = np.mean((index < low) | (index > high))
    # 20 000 pixels: standard error 0.15 %.
    assert outside == pytest.approx(0.05, abs=0.008)
    drifting = rng.poisson(200.0 * np.linspace(0.9, 1.1, 20)[:, None], size=(20, 5000))
    assert np.mean(dispersion(drifting).index > high) > 0.5


@pytest.mark.parametrize(("mean", "bias"), [(5, 0.0021), (10, 0.00054), (20, 0.00012)])
def test_log_of_counts_plus_half_is_nearly_unbiased(mean: float, bias: float) -> None:
    # Sums over the Poisson law; the leading term is 1 / (24 mean^2): J. B. S. Haldane,
    # Ann. Hum. Genet. 20 (1956) 309.
    counts = np.arange(400)
    log_law = counts * np.log(mean) - mean - np.cumsum(np.log(np.maximum(counts, 1)))
    found = np.exp(log_law) @ log_counts(counts) - np.log(mean)
    assert abs(found) == pytest.approx(bias, rel=0.05)
    assert abs(found) == pytest.approx(1.0 / (24.0 * mean**2), rel=0.4)
