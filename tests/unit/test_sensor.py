"""The sensor's pulse heights: compiled against NumPy, bookkeeping and refusals."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.kernels import pulse_height, pulse_height_numpy
from spectral.physics import sensor as sensor_module
from spectral.physics.materials import find_material
from spectral.physics.sensor import (
    ChargeTransport,
    Sensor,
    electron_range_um,
    pulse_heights,
    sample_points,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray


def sensor(
    material: str = "CdTe", *, thickness_um: float = 1000.0, pitch_um: float = 100.0
) -> Sensor:
    found = find_material(material)
    return Sensor(
        material=found.name,
        weight_fractions=found.weight_fractions,
        density_g_cm3=found.density_g_cm3,
        thickness_um=thickness_um,
        pitch_um=pitch_um,
    )


@pytest.mark.parametrize("pitch_um", [30.0, 100.0, 500.0])
@pytest.mark.parametrize("trapping", [0.0, 0.05])
@pytest.mark.parametrize("third_kev", [0.0, 4.0])
def test_compiled_collection_equals_the_numpy_twin(
    pitch_um: float, trapping: float, third_kev: float
) -> None:
    rng = np.random.default_rng(5)
    energies, samples = 4, 1500
    energy = np.array([20.0, 30.0, 60.0, 90.0])
    shape = (energies, samples)
    second = np.where(rng.random(shape) < 0.8, rng.uniform(5, 15, shape), 0.0)
    arguments = (
        np.array([0.7, 0.0, 1.3, 0.2]),
        rng.random((samples, 8)),
        np.array([0.03, 0.02, 0.004, 0.002]),
        energy[:, None] - second,
        second,
        rng.uniform(0.002, 0.05, shape),
        rng.uniform(-1.0, 1.0, shape),
        third_kev,
        0.02,
        np.array([9.0, 10.0, 20.0, 40.0]),
        0.1, 1000.0, pitch_um, trapping, 0.25, 0.5, sensor_module._normal_table(),
    )  # fmt: skip
    compiled, plain = np.zeros((energies, 150)), np.zeros((energies, 150))
    pulse_height.collect(compiled, *arguments)
    pulse_height_numpy.collect(plain, *arguments)
    assert compiled.sum() > 1.0
    # 1e-9: the same terms in another order; floor() may move no event between cells
    np.testing.assert_allclose(plain, compiled, rtol=1e-9, atol=1e-13)
    assert not compiled[1].any()


def test_whole_model_through_the_numpy_twin(monkeypatch: pytest.MonkeyPatch) -> None:
    energy = np.array([25.0, 45.0, 80.0])
    compiled = pulse_heights(sensor(), ChargeTransport(), energy, samples=512)
    monkeypatch.setattr(sensor_module, "collect", pulse_height_numpy.collect)
    plain = pulse_heights(sensor(), ChargeTransport(), energy, samples=512)
    np.testing.assert_allclose(plain, compiled, rtol=1e-9, atol=1e-12)


def test_same_arguments_give_the_same_heights() -> None:
    energy = np.array([40.0])
    first = pulse_heights(sensor(), ChargeTransport(), energy, samples=256)
    again = pulse_heights(sensor(), ChargeTransport(), energy, samples=256)
    assert np.array_equal(first, again)


def test_sample_points_cover_the_cube_and_cannot_be_changed() -> None:
    points = sample_points(1024)
    assert points.shape == (1024, 9)
    assert points.min() >= 0.0
    assert points.max() < 1.0
    # scrambled Sobol points in base 2: 64 equal slices of each axis get 16 points each
    for column in points.T:
        assert np.all(np.histogram(column, 64, (0.0, 1.0))[0] == 16)
    with pytest.raises(ValueError, match="read-only"):
        points[0, 0] = 0.5


def mean_height(
    heights: NDArray[np.float64], step_kev: float = 0.5
) -> NDArray[np.float64]:
    return heights @ (step_kev * np.arange(heights.shape[1]))


def test_sharing_moves_charge_but_loses_none() -> None:
    # what one pixel loses to its neighbours it gets from them
    energy = np.array([20.0, 25.0])
    quiet = ChargeTransport(fluorescence=0.0, initial_um=8.0)
    small = pulse_heights(sensor(pitch_um=75.0), quiet, energy, floor_kev=0.0)
    large = pulse_heights(sensor(pitch_um=5000.0), quiet, energy, floor_kev=0.0)
    # 0.2 %: the clouds reach a little beyond the 3 x 3 pixels that are followed
    np.testing.assert_allclose(mean_height(small), mean_height(large), rtol=2e-3)
    assert np.all(small.sum(axis=1) > 1.1 * large.sum(axis=1))


def test_fano_noise_has_its_variance_and_moves_nothing() -> None:
    # U. Fano, Phys. Rev. 72 (1947) 26: variance F epsilon E
    heights = np.zeros((1, 200))
    heights[0, 100] = 1.0
    spread = sensor_module._with_fano(heights, sensor(), 0.5)[0]
    level = 0.5 * np.arange(200)
    assert spread.sum() == pytest.approx(1.0, abs=1e-12)
    assert spread @ level == pytest.approx(50.0, abs=1e-9)
    assert spread @ (level - 50.0) ** 2 == pytest.approx(0.1 * 4.43e-3 * 50.0)


def test_trapping_lowers_pulses_in_proportion_to_drift() -> None:
    # all photons of 20 keV stop near the lit face and drift the whole thickness
    thick = sensor(thickness_um=5000.0, pitch_um=20_000.0)
    charge = ChargeTransport(fluorescence=0.0, initial_um=1.0)
    lossy = ChargeTransport(fluorescence=0.0, initial_um=1.0, trapping=0.1)
    energy = np.array([20.0])
    whole = mean_height(pulse_heights(thick, charge, energy, floor_kev=0.0))
    less = mean_height(pulse_heights(thick, lossy, energy, floor_kev=0.0))
    assert less / whole == pytest.approx(0.9, abs=0.002)


def test_electron_range_in_silicon_is_that_of_the_handbook() -> None:
    # Kanaya & Okayama give the depth reached, about the CSDA range of NIST ESTAR: 1.14
    # mg/cm2 or 4.9 um at 20 keV, 3.17 mg/cm2 at 35 keV (both from memory)
    found = electron_range_um(sensor("Si"), np.array([20.0]))
    assert found[0] == pytest.approx(4.9, rel=0.3)


def test_impossible_sensor_is_refused() -> None:
    with pytest.raises(InputError, match="positive thickness, pitch and density"):
        sensor(pitch_um=0.0)
