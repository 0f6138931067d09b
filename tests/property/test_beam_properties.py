"""What holds for every material, thickness, voltage and rate."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spectral.physics.attenuation import half_value_layer, homogeneity, transmission
from spectral.physics.counting import (
    CountingModel,
    bin_covariance,
    mean_counts,
    recorded_rate,
    true_rate,
    variance_counts,
)
from spectral.physics.materials import find_material, known_materials
from spectral.physics.spectrum import energy_bins, filtered
from spectral.physics.statistics import poisson_deviance
from spectral.physics.tube import tube_spectrum

pytestmark = pytest.mark.property
ENERGY = np.linspace(12.0, 150.0, 24)
materials = st.sampled_from(known_materials()).map(find_material)
thickness_mm = st.floats(0.0, 20.0)
models: st.SearchStrategy[CountingModel] = st.sampled_from(
    ("paralyzable", "non-paralyzable")
)


@given(materials, thickness_mm, thickness_mm)
def test_stacking_plates_adds_their_thickness(material, a, b) -> None:  # type: ignore[no-untyped-def]
    at_once = filtered(np.ones(24), ENERGY, [(material, a + b)])
    in_turn = filtered(np.ones(24), ENERGY, [(material, a), (material, b)])
    np.testing.assert_allclose(at_once, in_turn, rtol=1e-9, atol=1e-300)
    assert np.all((at_once >= 0.0) & (at_once <= 1.0))
    mu = material.mass_attenuation(ENERGY)[None, :]
    np.testing.assert_allclose(
        transmission(mu, [material.areal_density(a)]),
        filtered(np.ones(24), ENERGY, [(material, a)]),
        rtol=1e-12,
    )


@settings(max_examples=25, deadline=None)
@given(st.floats(30.0, 150.0), st.floats(6.0, 20.0), st.floats(0.5, 10.0))
def test_filters_harden_and_spectra_stay_positive(kv, angle, al_mm) -> None:  # type: ignore[no-untyped-def]
    bins = energy_bins(10.0, 160.0, 1.5, edges_kev=[69.525])
    photons = tube_spectrum(kv, bins.borders_kev, anode_angle_deg=angle)
    assert np.all(photons >= 0.0)
    assert np.all(np.isfinite(photons))
    al = find_material("Al")
    behind = filtered(photons, bins.centres_kev, [(al, al_mm)])
    before = half_value_layer(photons, bins.centres_kev, al)
    assert half_value_layer(behind, bins.centres_kev, al) > before
    assert 0.0 < homogeneity(behind, bins.centres_kev, al) < 1.0


@given(st.floats(0.0, 0.999), st.floats(1e-9, 1e-3), models)
def test_recorded_rates_are_turned_back(x: float, dead_s: float, model) -> None:  # type: ignore[no-untyped-def]
    rate = x / dead_s
    recorded = recorded_rate(rate, dead_s, model=model)
    assert recorded <= rate
    # Near x = 1 the paralyzable curve is flat: digits are lost there.
    back = true_rate(recorded, dead_s, model=model)
    assert float(back) == pytest.approx(rate, rel=1e-5, abs=1e-300)


@given(st.floats(0.0, 3.0), st.floats(1.0, 1e4), models)
def test_dead_time_narrows_the_spread(x: float, time: float, model) -> None:  # type: ignore[no-untyped-def]
    mean = mean_counts(x, time, 1.0, model=model)
    variance = variance_counts(x, time, 1.0, model=model)
    assert variance >= 0.0
    if time > 5.0:
        assert variance <= mean * (1.0 + 1e-12)
    covariance = bin_covariance(mean, variance, [0.6, 0.4])
    np.testing.assert_allclose(covariance.sum(), variance, rtol=1e-9, atol=1e-12)


@given(st.integers(0, 10**7), st.floats(1e-3, 1e7))
def test_deviance_is_never_negative(count: int, mean: float) -> None:
    assert poisson_deviance(count, mean) >= 0.0
