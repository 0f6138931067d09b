"""What holds of the forward model whatever object, rate and order of materials."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from spectral.forward.counting_model import CountingModel, counts_to_bins

pytestmark = pytest.mark.property


areal_densities = arrays(np.float64, (3, 2), elements=st.floats(0.0, 10.0))
rates = st.floats(1e2, 3e6)
counts = arrays(np.float64, (4, 5), elements=st.integers(0, 2**24).map(float))


@given(counts)
def test_bins_add_up_to_the_counts_above(above: np.ndarray) -> None:
    bins = counts_to_bins(above)
    back = np.cumsum(bins[:, ::-1], axis=1)[:, ::-1]
    np.testing.assert_array_equal(back, above)


@given(counts)
def test_bins_do_not_care_where_their_axis_stands(above: np.ndarray) -> None:
    np.testing.assert_array_equal(
        counts_to_bins(above.T, axis=0), counts_to_bins(above).T
    )


@given(areal_densities)
def test_transmission_is_a_share_of_the_open_beam(
    counting_model: CountingModel, areal: np.ndarray
) -> None:
    passed = counting_model.transmitted(areal)
    assert np.all(passed > 0.0)
    assert np.all(passed <= counting_model.spectrum)


@given(areal_densities, areal_densities)
def test_stacking_adds_areal_densities(
    counting_model: CountingModel, first: np.ndarray, second: np.ndarray
) -> None:
    # Beer-Lambert law: transmissions multiply
    behind = (
        counting_model.transmitted(first)
        * counting_model.transmitted(second)
        / counting_model.spectrum
    )
    np.testing.assert_allclose(
        counting_model.transmitted(first + second), behind, rtol=1e-10
    )


@settings(deadline=None, max_examples=25)
@given(areal_densities, rates)
def test_order_of_materials_does_not_matter(
    counting_model: CountingModel, areal: np.ndarray, rate: float
) -> None:
    turned = replace(counting_model, attenuation=counting_model.attenuation[::-1])
    np.testing.assert_allclose(
        turned.counting_curves(areal[:, ::-1], rate),
        counting_model.counting_curves(areal, rate),
        rtol=1e-9,
        atol=1e-9 * rate,
    )


@settings(deadline=None, max_examples=25)
@given(areal_densities, st.floats(1.0, 1e7))
def test_counts_without_dead_time_follow_rate_and_fall_with_level(
    counting_model: CountingModel, areal: np.ndarray, rate: float
) -> None:
    quick = counting_model.with_dead_time(0.0)
    one, many = quick.counting_curves(areal, 1.0), quick.counting_curves(areal, rate)
    np.testing.assert_allclose(many, rate * one, rtol=1e-9, atol=1e-9 * rate)
    assert np.all(np.diff(one[:, 20:], axis=1) <= 1e-12)


@settings(deadline=None, max_examples=25)
@given(areal_densities, rates)
def test_pile_up_takes_from_low_levels_only(
    counting_model: CountingModel, areal: np.ndarray, rate: float
) -> None:
    # above the largest single pulse (90 keV and noise) it can only add
    slow = counting_model.counting_curves(areal, rate)
    quick = counting_model.with_dead_time(0.0).counting_curves(areal, rate)
    tiny = 1e-9 * rate
    assert np.all(slow[:, 20] <= quick[:, 20] + tiny)
    assert np.all(slow[:, 200:] >= quick[:, 200:] - tiny)


@settings(deadline=None, max_examples=25)
@given(arrays(np.float64, (1, 2), elements=st.floats(0.0, 8.0)), st.floats(0.01, 2.0))
def test_more_material_lets_fewer_photons_count(
    counting_model: CountingModel, areal: np.ndarray, more: float
) -> None:
    thin = counting_model.counting_curves(areal, 100.0)
    for material in range(2):
        thick = areal.copy()
        thick[:, material] += more
        assert np.all(
            counting_model.counting_curves(thick, 100.0)[:, 40:160] < thin[:, 40:160]
        )
