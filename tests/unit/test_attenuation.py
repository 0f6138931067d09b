"""Transmission and half-value layers by hand."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.physics.attenuation import (
    air_kerma_weight,
    half_value_layer,
    homogeneity,
    transmission,
)
from spectral.physics.materials import find_material

ALUMINIUM = find_material("Al")


def test_transmission_of_a_stack() -> None:
    mu = [[0.2, 0.1], [1.0, 0.5]]
    areal = [[0.0, 0.0], [5.0, 1.0]]
    expected = [[1.0, 1.0], [np.exp(-2.0), np.exp(-1.0)]]
    np.testing.assert_allclose(transmission(mu, areal), expected)


def test_shapes_that_do_not_fit_are_refused() -> None:
    with pytest.raises(InputError, match=r"wanted \(material, energy\)"):
        transmission([[0.2], [0.1]], [1.0])


def test_half_value_layer_of_one_energy() -> None:
    # ln 2 / (0.2778 cm2/g * 2.699 g/cm3) = 9.245 mm
    layer = half_value_layer([7.0], [60.0], ALUMINIUM)
    assert layer == pytest.approx(9.245, rel=1e-3)
    assert homogeneity([7.0], [60.0], ALUMINIUM) == pytest.approx(1.0, abs=1e-6)
    quarter = half_value_layer([7.0], [60.0], ALUMINIUM, fraction=0.25)
    assert quarter == pytest.approx(2 * layer)


def test_weights_of_the_callers_own() -> None:
    energy = [30.0, 100.0]
    only_second = half_value_layer([1.0, 1.0], energy, ALUMINIUM, weight=[0.0, 1.0])
    assert only_second == pytest.approx(half_value_layer([1.0], [100.0], ALUMINIUM))


def test_air_kerma_at_table_points() -> None:
    np.testing.assert_allclose(air_kerma_weight([60.0, 100.0]), [60 * 0.03041, 2.325])


def test_impossible_input_is_refused() -> None:
    with pytest.raises(InputError, match=r"fraction 1\.5 must be between 0 and 1"):
        half_value_layer([1.0], [60.0], ALUMINIUM, fraction=1.5)
    with pytest.raises(InputError, match="not negative and not empty"):
        half_value_layer([0.0], [60.0], ALUMINIUM)
    with pytest.raises(InputError, match="air kerma is tabulated from 5 to 200 keV"):
        air_kerma_weight([250.0])
