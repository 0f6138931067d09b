"""Dead time: values by hand, inverses, refusals."""

from __future__ import annotations

from typing import cast

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.physics.counting import (
    CountingModel,
    bin_covariance,
    mean_counts,
    recorded_rate,
    true_rate,
    two_source_dead_time,
    variance_counts,
)

# rate 1e6 / s and dead time 200 ns: x = 0.2
RATE, DEAD_S = 1e6, 200e-9


def test_recorded_rates_by_hand() -> None:
    par = recorded_rate(RATE, DEAD_S, model="paralyzable")
    non = recorded_rate(RATE, DEAD_S, model="non-paralyzable")
    assert float(par) == pytest.approx(1e6 * np.exp(-0.2))
    assert float(non) == pytest.approx(1e6 / 1.2)


def test_variances_tend_to_the_textbook_limits() -> None:
    time = 1.0  # five million dead times
    mean = mean_counts(RATE, time, DEAD_S, model="paralyzable")
    variance = variance_counts(RATE, time, DEAD_S, model="paralyzable")
    assert float(variance / mean) == pytest.approx(1 - 0.4 * np.exp(-0.2), rel=1e-6)
    mean = mean_counts(RATE, time, DEAD_S, model="non-paralyzable")
    variance = variance_counts(RATE, time, DEAD_S, model="non-paralyzable")
    assert float(variance / mean) == pytest.approx(1.2**-2, rel=1e-6)


def test_rates_that_cannot_be_become_nan() -> None:
    limit = np.exp(-1) / DEAD_S
    found = true_rate([0.0, limit * 0.999, limit * 1.001], DEAD_S, model="paralyzable")
    assert found[0] == 0.0
    assert found[1] < 1 / DEAD_S
    assert np.isnan(found[2])
    assert np.isnan(true_rate(1 / DEAD_S, DEAD_S, model="non-paralyzable"))
    no_dead_time = true_rate([0.0, 5.0], 0.0, model="paralyzable")
    np.testing.assert_array_equal(no_dead_time, [0.0, 5.0])


def test_bin_covariance_by_hand() -> None:
    # mean 10, variance 6, shares 0.5 and 0.2:
    # var 5 + 0.25 (-4) = 4; 2 + 0.04 (-4) = 1.84; cov 0.1 (-4) = -0.4
    found = bin_covariance(10.0, 6.0, [0.5, 0.2])
    np.testing.assert_allclose(found, [[4.0, -0.4], [-0.4, 1.84]])


def test_impossible_input_is_refused() -> None:
    with pytest.raises(InputError, match="counting model 'ideal' is unknown"):
        recorded_rate(1.0, 1.0, model=cast("CountingModel", "ideal"))
    with pytest.raises(InputError, match="rates and dead times must be numbers"):
        true_rate(-1.0, 1.0, model="paralyzable")
    with pytest.raises(InputError, match="no shorter than the dead time"):
        variance_counts(1.0, 0.5, 1.0, model="paralyzable")
    with pytest.raises(InputError, match="bin_share must not be negative"):
        bin_covariance(10.0, 6.0, [0.7, 0.7])
    with pytest.raises(InputError, match="background give no dead time"):
        two_source_dead_time(100.0, 100.0, 250.0)


def test_no_loss_means_no_dead_time() -> None:
    assert two_source_dead_time(100.0, 50.0, 150.0) == 0.0
