"""Tube spectrum: limits, smoothness, bins, sources by name."""

from __future__ import annotations

import sys

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.physics.tube import spectrum_by_name, tube_spectrum
from spectral.physics.tube_target import (
    bremsstrahlung_per_path,
    towards_window,
    tungsten_attenuation,
)

BORDERS = np.arange(5.0, 161.0, 1.0)


def test_nothing_above_the_voltage_and_something_below() -> None:
    photons = tube_spectrum(80.4, BORDERS)
    assert np.all(photons[BORDERS[:-1] >= 80.4] == 0.0)
    assert np.all(photons[BORDERS[:-1] < 80.4] > 0.0)


def test_bins_add_up() -> None:
    coarse = tube_spectrum(100.0, BORDERS[::5])
    fine = tube_spectrum(100.0, BORDERS)
    summed = fine[: 5 * coarse.size].reshape(-1, 5).sum(axis=1)
    low = BORDERS[::5][:-1]
    smooth = (low > 15.0) & (low != 65.0)  # no L edge, no K edge inside
    np.testing.assert_allclose(coarse[smooth], summed[smooth], rtol=3e-3)


def test_lines_stand_where_tungsten_has_them() -> None:
    photons = tube_spectrum(120.0, BORDERS)
    peaks = (photons[1:-1] > photons[:-2]) & (photons[1:-1] > photons[2:])
    found = set(BORDERS[1:-2][peaks & (BORDERS[1:-2] > 50)])
    assert {57.0, 59.0, 67.0} <= found
    below = tube_spectrum(69.0, BORDERS)
    assert np.all(np.diff(below[(BORDERS[:-1] > 45.0)]) <= 0.0)


@pytest.mark.parametrize("voltage_kv", [45.0, 69.525, 79.99, 100.25, 159.0])
def test_smooth_in_voltage_and_angle(voltage_kv: float) -> None:
    step = 1e-3
    photons = [
        tube_spectrum(voltage_kv + shift * step, BORDERS) for shift in (-2, -1, 0, 1, 2)
    ]
    below = (photons[2] - photons[0]) / (2 * step)
    above = (photons[4] - photons[2]) / (2 * step)
    scale = np.abs(photons[2]).max()
    # The two one-sided slopes differ by the second derivative times the step.
    np.testing.assert_allclose(below, above, atol=2e-3 * scale)
    up = tube_spectrum(voltage_kv, BORDERS, anode_angle_deg=12.0 + step)
    down = tube_spectrum(voltage_kv, BORDERS, anode_angle_deg=12.0 - step)
    np.testing.assert_allclose(up + down - 2 * photons[2], 0.0, atol=1e-6 * scale)


def test_flatter_angle_and_higher_voltage_harden_the_beam() -> None:
    centre = BORDERS[:-1] + 0.5

    def mean(voltage_kv: float, angle: float) -> float:
        photons = tube_spectrum(voltage_kv, BORDERS, anode_angle_deg=angle)
        return float(photons @ centre / photons.sum())

    assert mean(100, 6) > mean(100, 12) > mean(100, 25)
    assert mean(120, 12) > mean(100, 12)


def test_attenuation_table_keeps_both_sides_of_the_k_edge() -> None:
    low, high = tungsten_attenuation(np.array([69.52, 69.53]))
    assert high / low == pytest.approx(4.5, abs=0.3)


def test_electrons_at_rest_radiate_alike_in_all_directions() -> None:
    slow = np.array([5.0])
    assert towards_window(100.0, slow, 12.0)[0] == pytest.approx(1.0, abs=0.01)
    fast = np.array([149.0])
    assert 0.3 < towards_window(150.0, fast, 12.0)[0] < 0.9


def test_bremsstrahlung_at_a_table_point() -> None:
    # 100 keV, half the energy: (Z / beta)^2 * 6.574 mb / (50 keV) * N_A / A, with
    # beta^2 = 0.30055.
    per_path = bremsstrahlung_per_path(np.array([100.0]), np.array([50.0]))[0]
    by_hand = 74**2 / 0.30055 * 6.574e-27 / 50.0 * 6.02214e23 / 183.84
    assert per_path == pytest.approx(by_hand, rel=2e-4)


@pytest.mark.parametrize("voltage_kv", [19.0, 161.0, np.nan])
def test_voltages_outside_the_model_are_refused(voltage_kv: float) -> None:
    with pytest.raises(InputError, match=r"is outside the model \(20 to 160 kV\)"):
        tube_spectrum(voltage_kv, BORDERS)


def test_other_impossible_input_is_refused() -> None:
    with pytest.raises(InputError, match="anode angle 0 degrees is outside"):
        tube_spectrum(100, BORDERS, anode_angle_deg=0)
    with pytest.raises(InputError, match="rising list of at least two"):
        tube_spectrum(100, BORDERS[::-1])
    with pytest.raises(InputError, match="lowest bin border 1 keV is below"):
        tube_spectrum(100, [1.0, 20.0])


def test_sources_by_name(monkeypatch: pytest.MonkeyPatch) -> None:
    ours = spectrum_by_name("tungsten", 100, BORDERS)
    np.testing.assert_array_equal(ours, tube_spectrum(100, BORDERS))
    with pytest.raises(InputError, match="spectrum 'molybdenum' is unknown"):
        spectrum_by_name("molybdenum", 100, BORDERS)
    monkeypatch.setitem(sys.modules, "spekpy", None)
    with pytest.raises(InputError, match="needs the package spekpy: install it with"):
        spectrum_by_name("spekpy", 100, BORDERS)


@pytest.mark.parametrize("name", ["spekpy", "spekpy-kqp"])
def test_spekpy_by_name_gives_the_same_units(name: str) -> None:
    pytest.importorskip("spekpy")
    theirs = spectrum_by_name(name, 90.0, BORDERS)
    ours = tube_spectrum(90.0, BORDERS)
    keep = BORDERS[:-1] > 20
    assert ours[keep].sum() == pytest.approx(theirs[keep].sum(), rel=0.05)
    assert np.all(theirs[BORDERS[:-1] >= 90.0] == 0.0)
