"""Transport of single photons: compiled against NumPy, and what must always hold."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.kernels import photon_transport, photon_transport_numpy
from spectral.virtual.charge_cloud import cloud_size_um
from spectral.virtual.detector import VirtualSensor
from spectral.virtual.pulse_library import (
    PulseLibrary,
    build_library,
    energy_borders,
    recorded_photons,
)
from spectral.virtual.sensor_tables import sensor_tables

CDTE = VirtualSensor(
    material="CdTe",
    density_g_cm3=5.85,
    thickness_um=1000.0,
    pitch_um=110.0,
    bias_v=500.0,
    pair_energy_ev=4.43,
    fano=0.1,
    relative_permittivity=10.9,
    mobility_lifetime_cm2_per_v=1e-3,
    gap_um=6.0,
    gap_loss=0.3,
)
SILICON = VirtualSensor(
    material="Si",
    density_g_cm3=2.33,
    thickness_um=500.0,
    pitch_um=75.0,
    bias_v=200.0,
    pair_energy_ev=3.62,
    fano=0.115,
    relative_permittivity=11.7,
)


@pytest.fixture(scope="module")
def library() -> PulseLibrary:
    borders = np.array([20.0, 30.0, 40.0, 60.0, 61.0])
    return build_library(
        CDTE, borders, seed=3, photons_per_bin=20_000, keep_events=True
    )


@pytest.mark.parametrize("sensor", [CDTE, SILICON], ids=["CdTe", "Si"])
def test_compiled_transport_equals_the_numpy_twin(sensor: VirtualSensor) -> None:
    tables = sensor_tables(sensor)
    kind = photon_transport_numpy.TransportTables
    same = kind(**{f.name: getattr(tables, f.name) for f in fields(kind)})
    photons, key = 2000, np.uint64(12345)
    twin = photon_transport_numpy.transport(key, 77, photons, 60.0, 90.0, same)
    height = np.empty(16 * photons, np.float32)
    offset = np.empty((16 * photons, 2), np.int16)
    begin = np.empty(photons + 1, np.int64)
    pulses = photon_transport.transport(
        key, 77, photons, 60.0, 90.0, tables.slab, tables.grid, tables.attenuation,
        tables.photo_share, tables.line_reach, tables.line_kev, tables.cosines,
        tables.cloud_um, tables.collected, 0.0, height, offset, begin,
    )  # fmt: skip
    image = np.zeros_like(twin)
    owner = np.repeat(np.arange(photons), np.diff(begin))
    middle = photon_transport_numpy.REACH
    row, column = offset[:pulses].T.astype(np.int64)
    near = (np.abs(row) < middle) & (np.abs(column) < middle)
    place = (owner[near], row[near] + middle, column[near] + middle)
    np.add.at(image, place, height[:pulses][near])
    inner = (slice(None), slice(1, -1), slice(1, -1))
    # heights are kept in single precision
    np.testing.assert_allclose(image[inner], twin[inner], atol=2e-5)
    assert pulses > 100


def test_no_photon_leaves_more_than_it_brought(library: PulseLibrary) -> None:
    for events, highest in zip(library.events, library.borders_kev[1:], strict=True):
        owner = np.repeat(np.arange(20_000), np.diff(events.begin))
        collected = np.bincount(owner, events.height_kev, minlength=20_000)
        # 1.6 % from deep deposits that trap less, and six sd of pair creation
        assert collected.max() < 1.016 * highest + 6 * np.sqrt(0.1 * 4.43e-3 * highest)


def test_ordered_heights_stand_for_all_events(library: PulseLibrary) -> None:
    levels = np.array([2.0, 8.0, 15.0, 22.0, 28.0, 35.0, 50.0, 58.0])
    for e, events in enumerate(library.events):
        counted = (events.height_kev[:, None] >= levels).sum(axis=0) / 20_000
        found = library.response(levels)[e]
        # one step of the ordered table is 1/2048 of the pulses
        np.testing.assert_allclose(found, counted, atol=0.5e-3)


def test_library_repeats_and_does_not_depend_on_threads(library: PulseLibrary) -> None:
    borders = library.borders_kev
    again = build_library(CDTE, borders, seed=3, photons_per_bin=20_000, threads=1)
    other = build_library(CDTE, borders, seed=4, photons_per_bin=20_000)
    assert np.array_equal(again.quantiles_kev, library.quantiles_kev)
    assert not np.array_equal(other.quantiles_kev, library.quantiles_kev)


def test_recorded_photons_leave_the_same_pulses(library: PulseLibrary) -> None:
    recorded = recorded_photons(library)
    assert recorded.begin[-1] == recorded.height_kev.size
    assert np.all(np.diff(recorded.begin) > 0)
    first = recorded.begin[recorded.first_photon]
    per_photon = np.diff(first) / 20_000
    np.testing.assert_allclose(per_photon, library.pulses_per_photon, rtol=1e-12)


def test_charge_lost_in_gaps_and_on_the_way_lowers_the_sum() -> None:
    def mean(sensor: VirtualSensor) -> float:
        borders = np.array([24.0, 25.0])
        built = build_library(sensor, borders, seed=1, keep_events=True)
        return float(built.events[0].height_kev.sum())

    keep = {f.name: getattr(CDTE, f.name) for f in fields(VirtualSensor)}
    whole = mean(VirtualSensor(**(keep | {"gap_loss": 0.0})))
    lossy = mean(VirtualSensor(**(keep | {"gap_loss": 1.0})))
    # charge is spread evenly over the pixel: what lands in the 6 um gaps of a pitch
    # of 110 um is lost, a share of 1 - (104/110)^2 = 0.106; small pulses below the
    # floor take a little more
    assert lossy / whole == pytest.approx((104.0 / 110.0) ** 2, abs=0.01)


def test_cloud_without_charge_grows_by_diffusion_alone() -> None:
    # sigma = d sqrt(2 kT/(qV)): 11.4 um for 1 mm CdTe at 400 V and 300 K (textbook)
    size = cloud_size_um(
        np.array([1e-6]), np.array([0.0]), np.linspace(0.0, 1000.0, 101),
        field_v_per_um=0.4, temperature_k=300.0, relative_permittivity=10.9,
    )  # fmt: skip
    assert size[0, -1] == pytest.approx(11.37, abs=0.01)


def test_cloud_without_warmth_grows_by_repulsion_alone() -> None:
    # d(sigma^2)/dh = R/sigma has the solution sigma^3 = sigma0^3 + 3 R h / 2
    charge, field = 2e-15, 0.4
    drift = np.linspace(0.0, 1000.0, 401)
    size = cloud_size_um(
        np.array([5.0]), np.array([charge]), drift,
        field_v_per_um=field, temperature_k=1e-6, relative_permittivity=10.9,
    )  # fmt: skip
    push = charge / (12.0 * np.pi**1.5 * 10.9 * 8.8541878e-18 * field)
    np.testing.assert_allclose(size[0] ** 3, 125.0 + 1.5 * push * drift, rtol=1e-6)


def test_borders_stand_on_edges_and_end_at_the_voltage() -> None:
    borders = energy_borders(60.2, (33.169, 26.711, 90.0))
    assert borders[0] == 5.0
    assert borders[-1] == 60.2
    assert 33.169 in borders
    assert 26.711 in borders
    assert np.diff(borders).max() <= 0.5 + 1e-9


def test_library_refuses_borders_and_clouds_that_cannot_be() -> None:
    with pytest.raises(InputError, match="borders_kev must rise within 1 to 200 keV"):
        build_library(CDTE, np.array([30.0, 20.0]), seed=1)
    keep = {f.name: getattr(CDTE, f.name) for f in fields(VirtualSensor)}
    small = VirtualSensor(**(keep | {"pitch_um": 20.0}))
    with pytest.raises(InputError, match="more than a third of pitch_um = 20"):
        build_library(small, np.array([20.0, 30.0]), seed=1)
    plain = build_library(CDTE, np.array([20.0, 21.0]), seed=1, photons_per_bin=100)
    with pytest.raises(InputError, match="build it with keep_events=True"):
        recorded_photons(plain)
