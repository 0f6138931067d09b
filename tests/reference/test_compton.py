"""Compton scattering against the Klein-Nishina formula and textbook energies."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from spectral.physics.compton import scattered_energy_kev, scattering_cosine
from spectral.physics.materials import find_material
from spectral.physics.sensor import ChargeTransport, Sensor, pulse_heights

pytestmark = pytest.mark.reference

QUANTILES = (np.arange(4000) + 0.5) / 4000


def mean_recoil_share(energy_kev: float) -> float:
    """Mean recoil over photon energy, by the sampled cosines."""
    cosine = scattering_cosine(np.array([energy_kev]), QUANTILES)[0]
    left = scattered_energy_kev(np.array(energy_kev), cosine)
    return float(1.0 - left.mean() / energy_kev)


def integrated_recoil_share(energy_kev: float) -> float:
    """The same by quadrature of the differential cross section over the angle."""
    alpha = energy_kev / 510.99895  # electron rest energy, CODATA 2018

    def klein_nishina(cosine: float) -> float:
        p = 1.0 / (1.0 + alpha * (1.0 - cosine))
        return p * p * (p + 1.0 / p - (1.0 - cosine * cosine))

    def taken(cosine: float) -> float:
        return klein_nishina(cosine) * (1.0 - 1.0 / (1.0 + alpha * (1.0 - cosine)))

    return float(quad(taken, -1, 1)[0] / quad(klein_nishina, -1, 1)[0])


@pytest.mark.parametrize("energy", [10.0, 20.0, 40.0, 60.0, 100.0, 150.0])
def test_mean_recoil_is_that_of_klein_and_nishina(energy: float) -> None:
    # O. Klein, Y. Nishina, Z. Phys. 52 (1929) 853, integrated independently
    assert mean_recoil_share(energy) == pytest.approx(
        integrated_recoil_share(energy), rel=2e-4
    )


@pytest.mark.parametrize(("energy", "share"), [(100.0, 0.138), (1000.0, 0.440)])
def test_mean_recoil_agrees_with_the_handbook(energy: float, share: float) -> None:
    # F. H. Attix, Introduction to Radiological Physics (1986), mean fraction of the
    # photon's energy given to the electron (from memory, three digits)
    assert mean_recoil_share(energy) == pytest.approx(share, abs=0.001)


def test_cosines_follow_the_distribution() -> None:
    # the forward half holds this share of the scattered photons, by quadrature
    for energy in (30.0, 120.0):
        cosine = scattering_cosine(np.array([energy]), QUANTILES)[0]
        alpha = energy / 510.99895

        def density(c: float, alpha: float = alpha) -> float:
            p = 1.0 / (1.0 + alpha * (1.0 - c))
            return p * p * (p + 1.0 / p - (1.0 - c * c))

        share = quad(density, 0, 1)[0] / quad(density, -1, 1)[0]
        assert np.mean(cosine > 0.0) == pytest.approx(share, abs=1e-3)
        assert np.all(np.diff(cosine) > 0.0)


def test_slow_photons_scatter_forward_and_back_alike() -> None:
    # Thomson limit, (3/8)(1 + cos^2): symmetric, mean square cosine 2/5 (textbook)
    cosine = scattering_cosine(np.array([0.01]), QUANTILES)[0]
    assert cosine.mean() == pytest.approx(0.0, abs=1e-3)
    assert np.mean(cosine**2) == pytest.approx(0.4, abs=1e-3)


@pytest.mark.parametrize(
    ("energy", "left"),
    [
        # backscatter and Compton edge of Cs-137, 661.66 keV: 184.3 and 477.3 keV
        # (G. F. Knoll, Radiation Detection and Measurement, from memory)
        (661.66, 184.3),
        # Am-241, 59.54 keV: 59.54 / (1 + 2 x 59.54 / 511.0) = 48.29, worked by hand
        (59.54, 48.29),
    ],
)
def test_energy_after_scattering_straight_back(energy: float, left: float) -> None:
    found = scattered_energy_kev(np.array(energy), np.array(-1.0))
    assert float(found) == pytest.approx(left, abs=0.06)


def test_forward_photons_lose_nothing() -> None:
    energy = np.array([20.0, 140.0])
    np.testing.assert_array_equal(scattered_energy_kev(energy, np.ones(2)), energy)


def test_recoils_in_silicon_end_at_the_compton_edge() -> None:
    # 60 keV in wide silicon pixels: recoils reach 60 x 2e/(1+2e) = 11.41 keV, e =
    # 60/511; only photons whose scattered part stops too give the full energy
    silicon = find_material("Si")
    sensor = Sensor(
        material="Si",
        weight_fractions=silicon.weight_fractions,
        density_g_cm3=silicon.density_g_cm3,
        thickness_um=300.0,
        pitch_um=1e5,
    )
    step = 0.25
    heights = pulse_heights(
        sensor, ChargeTransport(), np.array([60.0]), step_kev=step, floor_kev=0.0
    )[0]
    level = step * np.arange(heights.size)
    recoil = heights[(level > 1.0) & (level < 11.0)].sum()
    empty = heights[(level > 12.0) & (level < 50.0)].sum()
    assert recoil > 0.005
    assert empty < 0.01 * recoil
    beside_edge = heights[(level > 9.0) & (level < 11.0)].sum() / 2.0
    middle = heights[(level > 4.0) & (level < 7.0)].sum() / 3.0
    # Klein-Nishina in recoil energy: highest at the edge, a hollow in the middle
    assert beside_edge > middle
