"""Energies that threshold scans are measured by, and the shape of a counting step."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm

from spectral.calibration.threshold_scan.landmark_curve import (
    LN_WIDTH,
    landmark_curve,
)
from spectral.calibration.threshold_scan.landmark_shape import landmark_table
from spectral.calibration.threshold_scan.landmarks import landmark_of
from spectral.calibration.threshold_scan.source_photons import pulse_density
from spectral.physics.charge_sharing import mean_counts_per_photon
from spectral.physics.materials import find_material
from spectral.physics.sensor import ChargeTransport, Sensor
from spectral.scans.threshold_scan import LineSource

pytestmark = pytest.mark.reference

# K-alpha1, K-alpha2 and K-beta1 in keV: J. A. Bearden, Rev. Mod. Phys. 39 (1967) 78
# (from memory). Intensity of alpha2 to alpha1 near 1/2: the ratio of states, 2 to 4.
PUBLISHED_LINES = {
    "Cu": (8.0478, 8.0278, 8.9053),
    "Mo": (17.4793, 17.3743, 19.6083),
    "Ag": (22.1629, 21.9903, 24.9424),
    "Sn": (25.2713, 25.0440, 28.4860),
    "I": (28.6120, 28.3172, 32.2947),
    "Gd": (42.9962, 42.3089, 48.697),
}
# J. A. Bearden, A. F. Burr, Rev. Mod. Phys. 39 (1967) 125 (from memory).
PUBLISHED_EDGES = {"Mo": 19.9995, "Ag": 25.5140, "Sn": 29.2001, "Gd": 50.2391}


@pytest.mark.parametrize("element", PUBLISHED_LINES)
def test_k_alpha_is_the_mean_of_its_pair(element: str) -> None:
    mark = landmark_of(LineSource(kind="fluorescence target", emitter=element))
    first, second, beta = PUBLISHED_LINES[element]
    # alpha2/alpha1 is 0.50 to 0.56 from Cu to Gd (common knowledge of such tables);
    # 0.03 of it moves the mean by 0.02 of the pair's distance
    mean = (first + 0.53 * second) / 1.53
    assert mark.energy_kev == pytest.approx(mean, abs=0.003 + 0.02 * (first - second))
    distance, _ = mark.companions[0]
    # the K-beta group: beta1, beta3 just below, beta2 up to 3 % above
    assert mark.energy_kev + distance == pytest.approx(beta, rel=0.007)


@pytest.mark.parametrize("element", PUBLISHED_LINES)
def test_xraylib_gives_the_same_k_alpha(element: str) -> None:
    xraylib = pytest.importorskip("xraylib")
    mark = landmark_of(LineSource(kind="fluorescence target", emitter=element))
    number = xraylib.SymbolToAtomicNumber(element)
    assert mark.energy_kev == pytest.approx(
        xraylib.LineEnergy(number, xraylib.KA_LINE), abs=0.012
    )
    beta = xraylib.RadRate(number, xraylib.KB_LINE)
    alpha = xraylib.RadRate(number, xraylib.KA_LINE)
    assert mark.companions[0][1] == pytest.approx(beta / alpha, abs=0.02)


@pytest.mark.parametrize("element", PUBLISHED_EDGES)
def test_edges(element: str) -> None:
    source = LineSource(kind="edge filter", emitter=element, voltage_kv=80.0)
    assert landmark_of(source).energy_kev == pytest.approx(
        PUBLISHED_EDGES[element], abs=0.0025
    )


def test_americium() -> None:
    # 59.5409 keV: R. G. Helmer, C. van der Leun, Nucl. Instrum. Methods A 450 (2000) 35
    # (from memory); xraylib lists it by itself.
    mark = landmark_of(LineSource(kind="radionuclide", emitter="Am-241"))
    assert mark.energy_kev == pytest.approx(59.5409, abs=1e-4)
    xraylib = pytest.importorskip("xraylib")
    listed = xraylib.GetRadioNuclideDataByName("241Am")["GammaEnergies"]
    assert np.abs(np.array(listed) - mark.energy_kev).min() < 1e-3


def sensor(pitch_um: float) -> Sensor:
    stuff = find_material("CdTe")
    return Sensor(
        material="CdTe",
        weight_fractions=stuff.weight_fractions,
        density_g_cm3=5.85,
        thickness_um=1000.0,
        pitch_um=pitch_um,
    )


def test_step_of_a_line_without_sharing_is_the_error_function() -> None:
    # very large pixels: N above u falls as the normal tail about the line
    source = LineSource(kind="radionuclide", emitter="Am-241")
    table = landmark_table(
        landmark_of(source), source, sensor(1e5), ChargeTransport(diffusion_um=1e-3)
    )
    values = np.zeros((1, table.parameters))
    values[0, LN_WIDTH] = np.log(1.5)
    u = np.linspace(-2.0, 4.0, 61)
    shape = landmark_curve(table, u, values)[0][0]
    width = np.hypot(1.5, np.sqrt(0.1 * 4.43e-3 * 59.5))  # and Fano's
    assert np.allclose(shape, norm.sf(u / width), atol=4e-3)


def test_half_height_lies_below_the_line_when_charge_is_shared() -> None:
    # a monoenergetic line in small pixels: counts above t E are those of the area of
    # {h(x) h(y) > t}, noise folded in by quadrature
    source = LineSource(kind="fluorescence target", emitter="Ag")
    charge = ChargeTransport(
        initial_um=10.0, range_share=0.0, diffusion_um=0.0, fluorescence=0.0
    )
    density = pulse_density(source, sensor(100.0), charge)
    mark = landmark_of(source)
    table = landmark_table(mark, source, sensor(100.0), charge)
    noise = 1.0
    values = np.zeros((1, table.parameters))
    values[0, LN_WIDTH] = np.log(noise)

    # counts per absorbed photon above a share of its energy, by the area
    share = np.concatenate([np.linspace(0.2, 0.98, 79), 1.0 - np.geomspace(0.02, 1e-5)])
    area = [
        mean_counts_per_photon(t, pitch_um=100.0, sigma_um=10.0, steps=1000)
        for t in share
    ]
    moved = np.linspace(-5.0, 5.0, 2001)
    weight = norm.pdf(moved, scale=noise) * (moved[1] - moved[0])

    def above(level_kev: float) -> float:
        """Counts above a level under noise, of the line and those beside it."""
        total = 0.0
        for distance, strength in ((0.0, 1.0), *mark.companions):
            t = (level_kev - moved) / (mark.energy_kev + distance)
            total += strength * np.interp(t, share, area, right=0.0) @ weight
        return float(total)

    u = np.array([-4.0, -2.0, -1.0, 0.0, 1.0])
    expected = np.array([above(mark.energy_kev + x) for x in u])
    got = landmark_curve(table, u, values)[0][0]
    # relative to the plateau 4 keV below; Fano noise and the pair's width are left out
    # of the quadrature, as is what the sensor lets through
    assert np.allclose(got / got[0], expected / expected[0], atol=0.01)
    # so half of the plateau is reached below the line
    fine = np.linspace(-4.0, 3.0, 701)
    curve = landmark_curve(table, fine, values)[0][0]
    half = np.interp(-0.5 * curve[0], -curve, fine)
    assert -0.8 < half < -0.1
    assert density.pulses.sum() > 1.0
