"""Deviance, dispersion and logarithms by hand."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import poisson

from spectral.errors import InputError
from spectral.physics.statistics import (
    dispersion,
    dispersion_limits,
    log_counts,
    poisson_deviance,
    poisson_log_likelihood,
)


def test_deviance_by_hand() -> None:
    # 2 (3 ln(3/2) - 1); zero counts: 2 lambda; perfect: 0
    found = poisson_deviance([3, 0, 5, 0], [2.0, 1.5, 5.0, 0.0])
    np.testing.assert_allclose(found, [2 * (3 * np.log(1.5) - 1), 3.0, 0.0, 0.0])


def test_counts_where_none_can_be_have_no_chance() -> None:
    assert poisson_deviance(1, 0.0) == np.inf


def test_log_likelihood_is_that_of_the_poisson_law() -> None:
    counts, means = np.array([0, 3, 40]), np.array([0.2, 2.0, 50.0])
    np.testing.assert_allclose(
        poisson_log_likelihood(counts, means), poisson.logpmf(counts, means)
    )


def test_dispersion_by_hand() -> None:
    # 2, 4, 6: mean 4, squares 8, variance 4
    found = dispersion(np.array([[2, 0], [4, 0], [6, 0]], dtype=np.uint32))
    assert found.index[0] == pytest.approx(1.0)
    assert found.statistic[0] == pytest.approx(2.0)
    assert np.isnan(found.index[1])
    assert found.degrees == 2


def test_log_counts_at_zero() -> None:
    np.testing.assert_allclose(log_counts([0, 1]), np.log([0.5, 1.5]))


def test_impossible_input_is_refused() -> None:
    with pytest.raises(InputError, match="expected counts must be numbers"):
        poisson_deviance(1, np.nan)
    with pytest.raises(InputError, match="counts must be numbers and not negative"):
        poisson_deviance(-1, 1.0)
    with pytest.raises(InputError, match="two repeats or more, got counts of shape"):
        dispersion([5])
    with pytest.raises(InputError, match="two repeats or more, got 1"):
        dispersion_limits(1)
    with pytest.raises(InputError, match=r"level 1\.5 must be between"):
        dispersion_limits(5, level=1.5)
    with pytest.raises(InputError, match="counts must not be negative, got -1"):
        log_counts([-1])
