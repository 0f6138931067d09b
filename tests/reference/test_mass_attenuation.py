"""Mass attenuation against NIST SRD 126 and against an independent data set."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from spectral.physics.cross_sections import atomic_number, mass_attenuation
from spectral.physics.materials import find_material

if TYPE_CHECKING:
    from numpy.typing import NDArray

pytestmark = pytest.mark.reference
DATA = Path(__file__).parents[1] / "data"
ORGANIC = ("water", "PMMA", "polyethylene", "soft tissue", "C")
LIGHT_METALS = ("Al", "Si")
MIDDLE = ("cortical bone", "Ca", "Ti", "Fe", "Cu")
HEAVY = ("Sn", "I", "Gd", "W", "Pb")


def nist_rows() -> list[tuple[str, float, float]]:
    text = (DATA / "nist_mass_attenuation.csv").read_text().splitlines()
    rows = csv.DictReader(line for line in text if not line.startswith("#"))
    # Tables place an edge within 2 eV of each other: stay 5 eV off it.
    side = {"-": -0.005, "+": 0.005}
    return [
        (
            row["material"],
            float(row["energy_kev"].rstrip("+-"))
            + side.get(row["energy_kev"][-1], 0.0),
            float(row["mass_attenuation_cm2_g"]),
        )
        for row in rows
    ]


@pytest.mark.parametrize("material", sorted({row[0] for row in nist_rows()}))
def test_nist_table_points_are_met(material: str) -> None:
    # 0.1 % checks the code and the mixtures: the tables behind xraydb follow the same
    # evaluation, so agreement says nothing about the truth of the data. Four printed
    # digits add up to 0.05 %.
    rows = [(energy, value) for name, energy, value in nist_rows() if name == material]
    energy, published = np.array(rows).T
    computed = find_material(material).mass_attenuation(energy)
    np.testing.assert_allclose(computed, published, rtol=1e-3)


def floor(material: str, energy_kev: float) -> float:
    """Difference to expect between independent evaluations, as a share.

    No published limit: our own comparison of the two sets, rounded up. They differ most
    below the K edge of heavy elements.
    """
    if material in HEAVY:
        edges = {"Sn": 29.2, "I": 33.169, "Gd": 50.239, "W": 69.525, "Pb": 88.005}
        return 0.015 if energy_kev > edges[material] + 0.3 else 0.05
    if energy_kev < 30:
        return 0.03 if material in ORGANIC else 0.012
    return 0.009 if material in LIGHT_METALS else 0.007


@pytest.fixture(scope="module")
def other_tables() -> Any:
    """The "pene" tables of spekpy: another evaluation (PENELOPE, EPDL-based)."""
    spekpy = pytest.importorskip("spekpy")
    return spekpy.Spek(kvp=50.0, mu_data_source="pene").mu_data


@pytest.mark.parametrize("material", [*ORGANIC, *LIGHT_METALS, *MIDDLE, *HEAVY])
def test_an_independent_data_set_agrees(material: str, other_tables: Any) -> None:
    energy = np.array([10.0, 20.0, 30.0, 40.0, 60.0, 80.0, 100.0, 150.0])
    fractions = find_material(material).weight_fractions
    other: NDArray[np.float64] = np.sum(
        [
            fraction * other_tables.get_mu_over_rho(atomic_number(element), energy)
            for element, fraction in fractions.items()
        ],
        axis=0,
    )
    deviation = np.abs(other / mass_attenuation(fractions, energy) - 1.0)
    limits = [floor(material, kev) for kev in energy]
    assert np.all(deviation < limits), (deviation, limits)
    # The floors are not so wide that a wrong element would pass.
    wrong = mass_attenuation({"Zn": 1.0}, energy)
    assert np.any(np.abs(other / wrong - 1.0) > limits)


def test_partial_cross_sections_agree_with_xraylib() -> None:
    # Same photoelectric and scatter tables in both libraries: a check of the code.
    xraylib = pytest.importorskip("xraylib")
    names = {"photo": "CS_Photo", "coherent": "CS_Rayl", "incoherent": "CS_Compt"}
    for element in ("C", "Al", "Cd", "Te", "W"):
        for process, function in names.items():
            for kev in (15.0, 40.0, 90.0):
                theirs = getattr(xraylib, function)(atomic_number(element), kev)
                ours = mass_attenuation({element: 1.0}, kev, process=process)  # type: ignore[arg-type]
                assert float(ours) == pytest.approx(theirs, rel=5e-3)
