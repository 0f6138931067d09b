"""Materials: names, formulas, densities."""

from __future__ import annotations

import pytest

from spectral.errors import InputError
from spectral.physics.compositions import COMPOSITIONS
from spectral.physics.materials import (
    Material,
    find_material,
    known_materials,
    material_from_formula,
    material_from_weight_fractions,
)


@pytest.mark.parametrize("name", known_materials())
def test_every_listed_material_is_whole_and_sourced(name: str) -> None:
    material = find_material(name)
    assert material.name == name
    assert sum(material.weight_fractions.values()) == pytest.approx(1.0, abs=1e-12)
    assert material.density_g_cm3 > 0.0
    assert material.source
    entry = COMPOSITIONS[name]
    assert bool(entry.formula) != bool(entry.weight_fractions)
    if entry.weight_fractions:
        # The printed digits of a table may leave a few units in the last place.
        assert sum(entry.weight_fractions.values()) == pytest.approx(1.0, abs=1e-3)


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("pmma", "PMMA"),
        ("Soft Tissue", "soft tissue"),
        ("soft-tissue", "soft tissue"),
        ("PP", "polypropylene"),
        ("H2O", "water"),
        ("Al", "aluminium"),
        ("aluminum", "aluminium"),
        ("tin", "tin"),
        ("Sn", "tin"),
        ("Cd0.9Zn0.1Te", "CdZnTe"),
        ("304", "stainless steel 304"),
    ],
)
def test_names_and_aliases(text: str, name: str) -> None:
    assert find_material(text).name == name


def test_no_alias_is_used_twice() -> None:
    words = [
        word.casefold().replace(" ", "")
        for key, entry in COMPOSITIONS.items()
        for word in (key, *entry.aliases)
    ]
    assert len(words) == len(set(words))


def test_the_callers_density_goes_first() -> None:
    assert find_material("PMMA", density_g_cm3=1.18).density_g_cm3 == 1.18
    assert find_material("Al", density_g_cm3=2.71).density_g_cm3 == 2.71
    assert material_from_formula("PbO", 9.5, name="minium").density_g_cm3 == 9.5


def test_formulas_by_atomic_mass() -> None:
    # 40.08 / (40.08 + 12.01 + 3 * 16.00)
    calcite = find_material("CaCO3", density_g_cm3=2.71)
    assert calcite.weight_fractions["Ca"] == pytest.approx(0.4004, abs=1e-4)
    assert find_material("Zr").density_g_cm3 == pytest.approx(6.5, abs=0.1)


def test_titanium_nitride_is_not_tin() -> None:
    with pytest.raises(
        InputError, match=r"'TiN' is not in the table: give its density"
    ):
        find_material("TiN")
    nitride = find_material("TiN", density_g_cm3=5.4)
    assert set(nitride.weight_fractions) == {"Ti", "N"}


def test_unknown_words_are_refused() -> None:
    for text in ("unobtainium", "", "fe"):
        with pytest.raises(InputError, match="neither a chemical formula nor a known"):
            find_material(text)


def test_impossible_materials_are_refused() -> None:
    with pytest.raises(InputError, match="has density 0 g/cm3"):
        Material(name="void", weight_fractions={"H": 1.0}, density_g_cm3=0)
    with pytest.raises(InputError, match=r"sum to 0\.9, not to 1"):
        Material(name="part", weight_fractions={"H": 0.9}, density_g_cm3=1.0)
    with pytest.raises(InputError, match=r"sum to 0\.5, not to 1"):
        material_from_weight_fractions("part", {"H": 0.5}, 1.0)
    with pytest.raises(InputError, match=r"weight fraction of H in 'odd' is -0\.1"):
        material_from_weight_fractions("odd", {"H": -0.1, "O": 1.1}, 1.0)
    with pytest.raises(InputError, match="is not an element symbol"):
        material_from_weight_fractions("odd", {"Q": 1.0}, 1.0)


def test_small_rounding_of_fractions_is_mended() -> None:
    material = material_from_weight_fractions("mix", {"H": 0.111, "O": 0.888}, 1.0)
    assert sum(material.weight_fractions.values()) == pytest.approx(1.0, abs=1e-15)


def test_areal_density_of_a_plate() -> None:
    assert find_material("Al").areal_density(10.0) == pytest.approx(2.699)
