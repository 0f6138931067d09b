"""Charge sharing between square pixels, against brute force and conservation laws."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtr, ndtri

from spectral.errors import InputError
from spectral.physics.charge_sharing import (
    collected_fraction,
    diffusion_variance_per_um,
    mean_counts_per_photon,
)
from spectral.physics.materials import find_material
from spectral.physics.sensor import ChargeTransport, Sensor, pulse_heights

pytestmark = pytest.mark.reference

PIXELS_UM = [(55.0, 6.0), (75.0, 8.0), (100.0, 10.0), (250.0, 20.0), (500.0, 20.0)]
THRESHOLDS = (0.1, 0.25, 0.5, 0.75)


def test_collected_fraction_is_the_share_of_drawn_charges() -> None:
    rng = np.random.default_rng(1)
    charges = rng.normal(0.0, 12.0, (400_000, 2))
    places = np.array([[50.0, 50.0], [3.0, 40.0], [-5.0, 97.0], [99.0, 99.0]])
    found = collected_fraction(places[:, 0], places[:, 1], pitch_um=100.0, sigma_um=12)
    for (x, y), fraction in zip(places, found, strict=True):
        inside = (np.abs(charges + np.array([x, y]) - 50.0) < 50.0).all(axis=1)
        # 5 standard deviations of a share of 400 000 draws
        assert inside.mean() == pytest.approx(fraction, abs=5 * 0.5 / np.sqrt(4e5))


def test_an_edge_takes_half_and_a_corner_a_quarter() -> None:
    found = collected_fraction(
        np.array([0.0, 0.0]), np.array([50.0, 0.0]), pitch_um=100.0, sigma_um=8.0
    )
    np.testing.assert_allclose(found, [0.5, 0.25], atol=1e-8)


@pytest.mark.parametrize(("pitch", "sigma"), PIXELS_UM)
def test_mean_counts_equal_brute_force(pitch: float, sigma: float) -> None:
    # a cloud lands anywhere in a pixel; every pixel of the 3 x 3 around it that
    # collects more than the threshold's share counts
    rng = np.random.default_rng(2)
    centre = rng.uniform(0.0, pitch, (200_000, 2))
    border = np.arange(-1.0, 3.0) * pitch
    below = ndtr((border - centre[..., None]) / sigma)
    share = np.diff(below, axis=2)
    fraction = share[:, 0, :, None] * share[:, 1, None, :]
    for threshold in THRESHOLDS:
        counts = (fraction > threshold).sum(axis=(1, 2))
        error = counts.std() / np.sqrt(counts.size)
        exact = mean_counts_per_photon(threshold, pitch_um=pitch, sigma_um=sigma)
        assert abs(counts.mean() - exact) < 5.0 * error
        # the straight-edge estimate leaves the corners out and is higher, by 0.2 to 7 %
        edge = (1.0 + 2.0 * sigma * ndtri(1.0 - threshold) / pitch) ** 2
        assert 1.002 < edge / exact < 1.07


@pytest.mark.parametrize(("pitch", "sigma"), PIXELS_UM)
def test_fractions_of_all_pixels_add_up_to_the_whole(
    pitch: float, sigma: float
) -> None:
    # the integral of the mean counts over all thresholds is the mean sum of the
    # collected fractions, which is 1: nothing is lost between pixels
    node, weight = np.polynomial.legendre.leggauss(60)
    # near 0 the counts rise like the logarithm of the threshold: t = u^4 smooths that
    u = 0.5 * (node + 1.0)
    counts = np.array(
        [mean_counts_per_photon(v**4, pitch_um=pitch, sigma_um=sigma) for v in u]
    )
    assert (0.5 * weight * 4.0 * u**3 * counts).sum() == pytest.approx(1.0, abs=3e-4)


def test_wide_pixels_count_each_photon_once() -> None:
    for threshold in (0.1, 0.5, 0.9):
        wide = mean_counts_per_photon(threshold, pitch_um=1e5, sigma_um=1.0)
        assert wide == pytest.approx(1.0, abs=1e-3)


@pytest.mark.parametrize("threshold", [0.0, 1.0, -0.2])
def test_threshold_outside_the_pulse_is_refused(threshold: float) -> None:
    with pytest.raises(InputError, match="must lie between 0 and 1"):
        mean_counts_per_photon(threshold, pitch_um=100.0, sigma_um=10.0)


@pytest.mark.parametrize(
    ("thickness", "bias", "sigma"),
    [(300.0, 100.0, 6.8), (500.0, 300.0, 6.6), (1000.0, 400.0, 11.4)],
)
def test_diffusion_over_the_whole_thickness(
    thickness: float, bias: float, sigma: float
) -> None:
    # sigma = d sqrt(2 kT / (q V)): Einstein's relation with a uniform field, textbook;
    # kT/q = 8.617e-5 eV/K x 300 K (CODATA); values worked out by hand
    found = diffusion_variance_per_um(thickness_um=thickness, bias_v=bias) * thickness
    assert np.sqrt(found) == pytest.approx(sigma, abs=0.05)
    thermal = 8.617333e-5 * 300.0
    assert found == pytest.approx(2 * thermal * thickness**2 / bias, rel=1e-4)


def test_bias_must_be_positive() -> None:
    with pytest.raises(InputError, match="bias_v must be positive"):
        diffusion_variance_per_um(thickness_um=300.0, bias_v=0.0)


@pytest.mark.parametrize(("pitch", "sigma"), [(75.0, 8.0), (100.0, 10.0), (250.0, 20)])
def test_sensor_shares_charge_as_the_exact_area_says(
    pitch: float, sigma: float
) -> None:
    # one cloud size, no fluorescence: below the Cd edge (26.7 keV) CdTe absorbs
    # photoelectrically but for 0.3 %, so the model reduces to the area form
    cdte = find_material("CdTe")
    sensor = Sensor(
        material="CdTe",
        weight_fractions=cdte.weight_fractions,
        density_g_cm3=cdte.density_g_cm3,
        thickness_um=1000.0,
        pitch_um=pitch,
    )
    charge = ChargeTransport(
        initial_um=sigma, range_share=0.0, diffusion_um=0.0, fluorescence=0.0
    )
    energy, step = 25.0, 0.25
    heights = pulse_heights(
        sensor, charge, np.array([energy]), step_kev=step, grid=120, samples=16384
    )[0]
    for threshold in THRESHOLDS:
        # deposits are shared linearly between grid points: a level half way between
        # two of them parts the events without bias
        level = (round(threshold * energy / step - 0.5) + 0.5) * step
        counted = heights[int(level / step) + 1 :].sum()
        exact = mean_counts_per_photon(level / energy, pitch_um=pitch, sigma_um=sigma)
        assert counted == pytest.approx(exact, rel=0.006)
