"""Tube model against the radiation qualities of IEC 61267, edition 2 (2005).

The tube's own filtration is not part of the standard: Al is added until the half-value
layer of RQR is met, then the standard's Al on top must give the half-value layer of
RQA. Limits: the published reference models kept in spekpy stay within 1.9 % (40 to
80 kV) and 1 % (90 kV and more) in the same exercise, and the standard prints RQA to
0.1 mm, which is 4.5 to 0.8 % of the value, half of that either side.
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq

from spectral.physics.attenuation import half_value_layer, homogeneity
from spectral.physics.materials import find_material
from spectral.physics.spectrum import energy_bins, filtered
from spectral.physics.tube import tube_spectrum

pytestmark = pytest.mark.reference
DATA = Path(__file__).parents[1] / "data"
ALUMINIUM = find_material("Al")
AIR_1_M = find_material("N0.78O0.21Ar0.01", density_g_cm3=1.205e-3)


def qualities() -> list[dict[str, float]]:
    text = (DATA / "iec_61267_2005_beam_qualities.csv").read_text().splitlines()
    rows = csv.DictReader(line for line in text if not line.startswith("#"))
    return [{key: float(value) for key, value in row.items()} for row in rows]


@pytest.mark.parametrize("quality", qualities(), ids=lambda q: f"{q['voltage_kv']:g}kV")
def test_rqa_follows_from_rqr(quality: dict[str, float]) -> None:
    kv = quality["voltage_kv"]
    bins = energy_bins(5.0, kv, 0.5, edges_kev=[69.525])
    energy = bins.centres_kev
    bare = filtered(tube_spectrum(kv, bins.borders_kev), energy, [(AIR_1_M, 1000.0)])

    def behind(al_mm: float) -> float:
        beam = filtered(bare, energy, [(ALUMINIUM, al_mm)])
        return half_value_layer(beam, energy, ALUMINIUM)

    al_mm = brentq(lambda t: behind(t) - quality["rqr_hvl_mm"], 0.0, 6.0)
    # Total filtration of a tube at these voltages, common practice, no source.
    assert 2.3 < al_mm < 4.2
    rqr = filtered(bare, energy, [(ALUMINIUM, al_mm)])
    expected = quality["rqr_homogeneity"]
    # The standard's second decimal, and 0.01 that the reference models differ by.
    assert homogeneity(rqr, energy, ALUMINIUM) == pytest.approx(expected, abs=0.015)
    rqa = half_value_layer(
        filtered(rqr, energy, [(ALUMINIUM, quality["rqa_added_mm"])]),
        energy,
        ALUMINIUM,
    )
    limit = 0.025 if kv <= 80 else 0.015
    assert rqa == pytest.approx(quality["rqa_hvl_mm"], rel=limit)


@pytest.mark.parametrize(
    ("kv", "rqr_hvl_mm", "copper_mm", "rqt_hvl_mm"),
    # IEC 61267 (2005), RQT 8 to 10; the added copper from memory.
    [(100, 3.97, 0.20, 6.9), (120, 5.00, 0.25, 8.4), (150, 6.57, 0.30, 10.1)],
)
def test_rqt_follows_from_rqr(
    kv: float, rqr_hvl_mm: float, copper_mm: float, rqt_hvl_mm: float
) -> None:
    bins = energy_bins(5.0, kv, 0.5, edges_kev=[69.525])
    energy = bins.centres_kev
    bare = tube_spectrum(kv, bins.borders_kev)

    def beam(al_mm: float, copper: float) -> float:
        layers = [(ALUMINIUM, al_mm), (find_material("Cu"), copper)]
        return half_value_layer(filtered(bare, energy, layers), energy, ALUMINIUM)

    al_mm = brentq(lambda t: beam(t, 0.0) - rqr_hvl_mm, 0.0, 6.0)
    assert beam(al_mm, copper_mm) == pytest.approx(rqt_hvl_mm, rel=0.015)


@pytest.mark.parametrize("kv", [40.0, 60.0, 80.0, 100.0, 120.0, 150.0])
@pytest.mark.parametrize("physics", ["casim", "kqp"])
def test_spekpy_has_the_same_shape_and_output(kv: float, physics: str) -> None:
    # Reference: G. Poludniowski et al., Med. Phys. 48 (2021) 3630. The bremsstrahlung
    # table is shared with it; electrons, self-absorption, directions and lines are
    # worked out apart.
    spekpy = pytest.importorskip("spekpy")
    tube = spekpy.Spek(
        kvp=kv,
        th=12.0,
        dk=0.5,
        physics=physics,
        mas=1.0,
        z=100.0,
        mu_data_source="nist",
    )
    tube.filter("Al", 2.5)
    centre, per_kev = tube.get_spectrum()
    keep = centre > 5.0
    energy, theirs = centre[keep], per_kev[keep] * 0.5
    borders = np.append(energy - 0.25, energy[-1] + 0.25)
    layers = [(ALUMINIUM, 2.5)]
    ours = filtered(tube_spectrum(kv, borders) / 1e4, energy, layers)
    # Output in photons per cm2 and mA s at 1 m.
    assert ours.sum() == pytest.approx(theirs.sum(), rel=0.05)
    assert ours @ energy / ours.sum() == pytest.approx(
        theirs @ energy / theirs.sum(), rel=0.007
    )
    assert half_value_layer(ours, energy, ALUMINIUM) == pytest.approx(
        half_value_layer(theirs, energy, ALUMINIUM), rel=0.02
    )
    # Bin by bin where counts matter, lines apart.
    line = (energy > 56.0) & (energy < 70.5)
    shape = (energy > 0.35 * kv) & (energy < 0.95 * kv) & ~line
    ratio = ours[shape] / theirs[shape] * theirs[shape].sum() / ours[shape].sum()
    np.testing.assert_allclose(ratio, 1.0, atol=0.08)
    assert np.sqrt(np.mean((ratio - 1.0) ** 2)) < 0.03


@pytest.mark.parametrize("kv", [90.0, 120.0, 150.0])
def test_share_of_k_lines_is_that_of_spekpy(kv: float) -> None:
    spekpy = pytest.importorskip("spekpy")
    settings = {"kvp": kv, "th": 12.0, "dk": 0.5, "mas": 1.0, "z": 100.0}
    lines = spekpy.Spek(brem=False, **settings).filter("Al", 2.5)
    theirs = lines.get_spectrum()
    theirs_total = 0.5 * theirs[1][theirs[0] > 50].sum()
    borders = np.arange(50.25, 75.0, 0.5)
    energy = 0.5 * (borders[1:] + borders[:-1])
    layers = [(ALUMINIUM, 2.5)]
    ours = filtered(tube_spectrum(kv, borders) / 1e4, energy, layers)
    base = np.minimum(ours[:-2], ours[2:])
    excess = np.clip(ours[1:-1] - 1.3 * base, 0.0, None)
    # Five lines stand out of the continuum; 30 % of it goes with each.
    found = float(np.sum(excess + 0.3 * base * (excess > 0.0)))
    assert found == pytest.approx(theirs_total, rel=0.10)
