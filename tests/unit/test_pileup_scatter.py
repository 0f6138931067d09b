"""What overlapping pulses add to the covariance of the bins."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.physics.pileup import PulseShape
from spectral.physics.pileup_scatter import overlap_covariance, pulse_pairs

LEVELS = np.array([12.0, 22.0, 33.0])
SHAPE = PulseShape(dead_time_ns=5.0, tail_ns=40.0)


def pulses() -> np.ndarray:
    level = 0.5 * np.arange(120)
    one = np.exp(-0.5 * ((level - 30.0) / 8.0) ** 2)
    return np.stack([one, 2.0 * one]) * 1e4


def test_bins_add_up_to_the_lowest_threshold_whose_scatter_stays() -> None:
    added = overlap_covariance(pulses(), SHAPE, LEVELS, step_kev=0.5)
    np.testing.assert_allclose(added.sum(axis=2), 0.0, atol=1e-9 * added.max())
    np.testing.assert_allclose(added, added.transpose(0, 2, 1))
    assert np.all(np.einsum("cii->ci", added) > 0.0)


def test_overlaps_go_with_the_square_of_the_rate_and_with_the_time() -> None:
    added = overlap_covariance(pulses(), SHAPE, LEVELS, step_kev=0.5)
    np.testing.assert_allclose(added[1], 4.0 * added[0])
    longer = PulseShape(dead_time_ns=5.0, tail_ns=80.0)
    np.testing.assert_allclose(
        overlap_covariance(pulses(), longer, LEVELS, step_kev=0.5), 2.0 * added
    )


def test_what_falls_at_once_or_has_one_threshold_leaves_no_valley_in_a_bin() -> None:
    flat = PulseShape(dead_time_ns=100.0)
    assert not overlap_covariance(pulses(), flat, LEVELS, step_kev=0.5).any()
    one = overlap_covariance(pulses(), SHAPE, LEVELS[:1], step_kev=0.5)
    np.testing.assert_allclose(one, 0.0, atol=1e-9)
    none = overlap_covariance(0.0 * pulses(), SHAPE, LEVELS, step_kev=0.5)
    assert not none.any()


@pytest.mark.parametrize("order", [0.3, 1.0, 3.0])
def test_a_valley_lies_below_its_peaks(order: float) -> None:
    pairs = pulse_pairs(order)
    apart = pairs.apart
    assert np.all(pairs.valley[apart] <= pairs.first[apart])
    assert np.all(pairs.valley[apart] <= pairs.second[apart])
    # close together they are one pulse, far from each other two
    assert not apart[0].any()
    assert apart[-1].all()
    whole = 1.0 + np.exp(pairs.log_ratio)
    np.testing.assert_allclose(pairs.first[-1] * whole, 1.0)
    np.testing.assert_allclose(
        pairs.second[-1] * whole, np.exp(pairs.log_ratio), atol=3e-2
    )
