"""Cross sections: units, shapes, refusals."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.physics import cross_sections as xs

WATER = {"H": 0.111894, "O": 0.888106}


@pytest.mark.parametrize(
    "energy",
    [60, 60.0, np.int64(60), np.float32(60), np.array(60), [60], np.array([[60]])],
)
def test_any_real_energy_keeps_its_shape(energy: Any) -> None:
    value = xs.mass_attenuation(WATER, energy)
    assert value.shape == np.shape(energy)
    assert value.dtype == np.float64
    np.testing.assert_allclose(value, 0.20587, rtol=1e-4)


def test_total_is_the_sum_of_its_parts() -> None:
    energy = np.linspace(10, 150, 15)
    parts = [xs.mass_attenuation(WATER, energy, process=p) for p in xs.PROCESSES[1:]]
    np.testing.assert_allclose(
        xs.mass_attenuation(WATER, energy), np.sum(parts, axis=0), rtol=1e-14
    )


def test_fractions_are_taken_as_they_stand() -> None:
    half = xs.mass_attenuation({"Fe": 0.5}, 60.0)
    np.testing.assert_allclose(half, 0.5 * xs.mass_attenuation({"Fe": 1.0}, 60.0))


def test_the_callers_energies_and_the_kept_values_stay_untouched() -> None:
    energy = np.array([10.0, 800.0, 1.0])
    energy.flags.writeable = False
    first = xs.mass_attenuation({"Cu": 1.0}, energy)
    kept = first.copy()
    first *= 0.0
    np.testing.assert_array_equal(xs.mass_attenuation({"Cu": 1.0}, energy), kept)


def test_no_energies_give_no_values() -> None:
    assert xs.mass_attenuation(WATER, []).shape == (0,)


@pytest.mark.parametrize("energy", [0.5, 801.0, [20.0, np.nan], -5.0, np.inf])
def test_energies_outside_the_tables_are_refused(energy: Any) -> None:
    with pytest.raises(
        InputError, match=r"outside the cross-section tables \(1 to 800"
    ):
        xs.mass_attenuation(WATER, energy)


def test_unknown_words_are_refused() -> None:
    with pytest.raises(InputError, match="process 'pair' is unknown"):
        xs.mass_attenuation(WATER, 60, process="pair")  # type: ignore[arg-type]
    for symbol in ("Xx", "fe", "iron", ""):
        with pytest.raises(InputError, match="is not an element symbol"):
            xs.mass_attenuation({symbol: 1.0}, 60)


def test_k_lines_are_shares_strongest_first() -> None:
    lines = xs.k_lines("Te")
    shares = [share for _, share in lines]
    assert shares == sorted(shares, reverse=True)
    assert sum(shares) == pytest.approx(1.0)
    assert all(energy < xs.k_edge_kev("Te") for energy, _ in lines)


def test_an_element_without_k_lines_is_refused() -> None:
    with pytest.raises(InputError, match="element H has no K lines"):
        xs.k_lines("H")


def test_formulas_are_counted() -> None:
    assert xs.parse_formula(" Ca10(PO4)6(OH)2 ") == {"Ca": 10, "P": 6, "O": 26, "H": 2}
    for text in ("", "Xx2", "PMMA", "Fe0", "12"):
        with pytest.raises(InputError, match="is not a chemical formula"):
            xs.parse_formula(text)


def test_tables_name_their_version() -> None:
    assert "Elam" in xs.table_source()
    assert "xraydb data 9" in xs.table_source()


def test_densities_and_masses_of_elements() -> None:
    assert xs.element_density("C") == pytest.approx(2.2, abs=0.1)
    assert xs.atomic_mass("Cd") == pytest.approx(112.41, abs=0.01)
