"""Pulse heights of the virtual sensor against closed forms and tabulated lines."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
from scipy.special import ndtr

from spectral.kernels.photon_transport import transport
from spectral.physics.cross_sections import (
    k_fluorescence_yield,
    k_jump_ratio,
    k_lines,
    mass_attenuation,
)
from spectral.physics.materials import find_material
from spectral.virtual.detector import VirtualSensor
from spectral.virtual.sensor_tables import SensorTables, sensor_tables

if TYPE_CHECKING:
    from numpy.typing import NDArray

pytestmark = pytest.mark.reference

AMERICIUM_KEV = 59.5409
"""Gamma line of Am-241 (decay data, as commonly tabulated)."""
IDEAL = VirtualSensor(
    material="CdTe",
    density_g_cm3=5.85,
    thickness_um=20_000.0,
    pitch_um=50_000.0,
    bias_v=1e6,
    pair_energy_ev=4.43,
    fano=0.0,
    relative_permittivity=10.9,
    track_share=0.0,
)
PHOTONS = 200_000


def heights(
    tables: SensorTables, energy_kev: float, *, photons: int = PHOTONS
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Pulse heights of photons of one energy, and where each photon's begin."""
    height = np.empty(12 * photons, np.float32)
    begin = np.empty(photons + 1, np.int64)
    pulses = transport(
        np.uint64(11), 0, photons, energy_kev, energy_kev, tables.slab, tables.grid,
        tables.attenuation, tables.photo_share, tables.line_reach, tables.line_kev,
        tables.cosines, tables.cloud_um, tables.collected, 1e-3, height,
        np.empty((12 * photons, 2), np.int16), begin,
    )  # fmt: skip
    return height[:pulses].astype(float), begin


@pytest.fixture(scope="module")
def thick() -> SensorTables:
    return sensor_tables(IDEAL)


def test_escape_peaks_of_americium_in_cdte(thick: SensorTables) -> None:
    # 59.54 keV less the K lines of Cd and Te. Lines: J. A. Bearden, Rev. Mod. Phys. 39
    # (1967) 78 (from memory): Cd Ka1 23.174, Kb1 26.096; Te Ka1 27.472, Kb1 30.996 keV
    found, _ = heights(thick, AMERICIUM_KEV)
    for peak in (36.37, 33.45, 32.07, 28.55):
        inside = np.abs(found - peak) < 0.03
        beside = np.abs(found - peak - 0.5) < 0.03
        assert inside.sum() > 100, peak
        assert inside.sum() > 20 * beside.sum(), peak


def escape(element: str, *, line: float, at_kev: float) -> float:
    """Escaped photons of a K line through the lit face, per incident photon."""
    fractions = find_material("CdTe").weight_fractions

    def active(energy: float) -> float:
        return sum(
            float(mass_attenuation(fractions, energy, process=process))
            for process in ("photo", "incoherent")
        )

    own = {element: fractions[element]}
    emitted = (
        float(mass_attenuation(own, at_kev, process="photo"))
        / active(at_kev)
        * (1.0 - 1.0 / k_jump_ratio(element))
        * k_fluorescence_yield(element)
        * dict(k_lines(element))[line]
    )
    ratio = active(line) / active(at_kev)
    return float(emitted * 0.5 * (1.0 - ratio * np.log(1.0 + 1.0 / ratio)))


@pytest.mark.parametrize(("element", "at_kev"), [("Te", 59.5409), ("Te", 40.0)])
def test_escape_fraction_is_the_closed_form(
    thick: SensorTables, element: str, at_kev: float
) -> None:
    # front escape from a half-space: 1/2 [1 - (mu_f/mu_0) ln(1 + mu_0/mu_f)]
    # P. Axel, Rev. Sci. Instrum. 25 (1954) 391 (from memory; derived again). Te lines
    # come from primary absorption only, so the form is complete for them.
    found, _ = heights(thick, at_kev)
    line = k_lines(element)[0][0]
    counted = (np.abs(found - (at_kev - line)) < 0.02).sum() / PHOTONS
    expected = escape(element, line=line, at_kev=at_kev)
    # the sequence is even in depth, not in direction: four Poisson errors, and 1 % for
    # scattered photons
    error = 4.0 * (expected / PHOTONS) ** 0.5 + 0.01 * expected
    assert counted == pytest.approx(expected, abs=error)


def test_cadmium_escapes_more_often_by_way_of_tellurium(thick: SensorTables) -> None:
    # with the Te lines switched off only primary Cd photons escape; with them, those
    # that Te photons excite deeper or shallower are added
    line = k_lines("Cd")[0][0]
    cadmium = np.array([e < 27.0 for e in thick.line_kev])
    alone = replace(
        thick,
        line_kev=thick.line_kev[cadmium],
        line_reach=np.ascontiguousarray(thick.line_reach[cadmium]),
    )
    counted = {}
    for name, tables in (("alone", alone), ("both", thick)):
        found, _ = heights(tables, AMERICIUM_KEV)
        near = np.abs(found - (AMERICIUM_KEV - line)) < 0.02
        counted[name] = near.sum() / PHOTONS
    expected = escape("Cd", line=line, at_kev=AMERICIUM_KEV)
    error = 4.0 * (expected / PHOTONS) ** 0.5 + 0.01 * expected
    assert counted["alone"] == pytest.approx(expected, abs=error)
    assert counted["both"] > expected + 2 * error


@pytest.mark.parametrize(
    ("material", "density", "thickness_um", "energy_kev"),
    [
        ("CdTe", 5.85, 1000.0, 60.0),
        ("CdTe", 5.85, 1000.0, 100.0),
        ("GaAs", 5.32, 500.0, 40.0),
        ("Si", 2.33, 300.0, 20.0),
        ("Si", 2.33, 500.0, 60.0),
    ],
)
def test_share_of_photons_that_interact(
    material: str, density: float, thickness_um: float, energy_kev: float
) -> None:
    # 1 - exp(-mu d), all but coherent scattering
    sensor = replace(
        IDEAL, material=material, density_g_cm3=density, thickness_um=thickness_um
    )
    _, begin = heights(sensor_tables(sensor), energy_kev, photons=50_000)
    fractions = find_material(material).weight_fractions
    active = sum(
        float(mass_attenuation(fractions, energy_kev, process=process))
        for process in ("photo", "incoherent")
    )
    expected = -np.expm1(-active * density * thickness_um * 1e-4)
    counted = (np.diff(begin) > 0).mean()
    assert counted == pytest.approx(expected, abs=1e-3)


def test_compton_recoil_has_its_edge() -> None:
    # largest recoil of 60 keV: E 2e/(1 + 2e), e = E/511, 11.41 keV (A. H. Compton,
    # Phys. Rev. 21 (1923) 483); a thin sensor lets the scattered photon go
    sensor = replace(IDEAL, material="Si", density_g_cm3=2.33, thickness_um=20.0)
    found, _ = heights(sensor_tables(sensor), 60.0, photons=2_000_000)
    low = found[found < 20.0]
    before = ((low > 10.91) & (low < 11.41)).sum()
    after = ((low > 11.41) & (low < 11.91)).sum()  # photons that scattered twice
    assert before > 100
    assert after < 0.05 * before


@pytest.mark.parametrize(("pitch", "sigma"), [(55.0, 6.0), (100.0, 10.0)])
def test_shared_charge_counts_as_the_area_of_its_profile(
    pitch: float, sigma: float
) -> None:
    # a cloud of one size over square pixels: counts per photon above a share t of its
    # energy are the area of {h(x) h(y) > t} over the pixel's; h by quadrature here
    tables = sensor_tables(replace(IDEAL, pitch_um=pitch, thickness_um=1000.0))
    tables = replace(
        tables,
        line_kev=np.empty(0),
        line_reach=np.empty((0, tables.attenuation.size)),
        photo_share=np.ones_like(tables.photo_share),
        attenuation=np.ones_like(tables.attenuation),
        cloud_um=np.full_like(tables.cloud_um, sigma),
    )
    found, _ = heights(tables, 50.0, photons=100_000)
    u = np.arange(-0.5 * pitch, 1.5 * pitch, pitch / 2000.0)
    h = ndtr((pitch - u) / sigma) - ndtr(-u / sigma)
    ordered = np.sort(h)
    for t in (0.1, 0.25, 0.5, 0.75):
        above = h.size - np.searchsorted(ordered, t / np.maximum(h, 1e-300))
        expected = above.sum() / 2000.0**2
        counted = (found > t * 50.0).sum() / 100_000
        assert counted == pytest.approx(expected, rel=2e-3)
