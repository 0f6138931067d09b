"""Pixels that count the same photons: their covariance, and that of nothing else."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from spectral.virtual.detector import VirtualDetector, VirtualSensor
from spectral.virtual.exposure import Beam, VirtualBench
from spectral.virtual.pixels import draw_pixels
from spectral.virtual.pulse_library import build_library, recorded_photons

pytestmark = [pytest.mark.reference, pytest.mark.slow]

SENSOR = VirtualSensor(
    material="CdTe",
    density_g_cm3=5.85,
    thickness_um=1000.0,
    pitch_um=80.0,
    bias_v=500.0,
    pair_energy_ev=4.43,
    fano=0.1,
    relative_permittivity=10.9,
)
DETECTOR = VirtualDetector(
    name="made up",
    sensor=SENSOR,
    thresholds_kev=(15.0, 40.0),
    noise_kev=0.0,
    dead_time_ns=0.01,
    pulse_shape="rectangle",
)
SIZE, EXPOSURES, PHOTONS = 32, 24, 400.0


def test_covariance_of_neighbours_is_the_rate_of_shared_photons() -> None:
    # photons come as a Poisson process, and without pile-up the covariance of two
    # counts is the mean number of photons that both count (N. R. Campbell's theorem for
    # two sums over one process: J. F. C. Kingman, Poisson Processes, Oxford 1993, ch. 3)
    borders = np.array([60.0, 61.0])
    library = build_library(
        SENSOR, borders, seed=1, photons_per_bin=200_000, keep_events=True
    )
    levels = np.array(DETECTOR.thresholds_kev)
    together = VirtualBench(
        detector=DETECTOR,
        pixels=draw_pixels(DETECTOR, levels, (SIZE, SIZE), np.random.default_rng(1)),
        library=library,
        spectrum=np.ones(1),
        attenuation=np.zeros((1, 1)),
        seed=9,
        recorded=recorded_photons(library),
    )
    beam = Beam(
        duration_s=0.01,
        photons_per_s=np.full((SIZE, SIZE), PHOTONS / 0.01),
        areal_density=np.zeros((1, SIZE, SIZE)),
    )
    counts = {
        name: np.array([bench.expose(i, beam)[0] for i in range(EXPOSURES)], float)
        for name, bench in (
            ("together", together),
            ("alone", replace(together, recorded=None)),
        )
    }
    # from the events: photons that leave a pulse above the level in a pixel and in the
    # next one of the row, and in any pixel
    events = library.events[0]
    owner = np.repeat(np.arange(200_000), np.diff(events.begin))
    high = events.height_kev >= levels[0]
    image = np.zeros((200_000, 17))
    shared = 0.0
    for row in np.unique(events.offset[high, 0]):
        image[:] = 0.0
        here = high & (events.offset[:, 0] == row)
        column = np.clip(events.offset[here, 1].astype(int), -8, 8) + 8
        np.add.at(image, (owner[here], column), 1.0)
        shared += float((image[:, 1:] * image[:, :-1]).sum())
    expected = PHOTONS * shared / 200_000
    mean = PHOTONS * high.sum() / 200_000
    pairs = EXPOSURES * SIZE * (SIZE - 1)
    for name, covariance in (("together", expected), ("alone", 0.0)):
        found = counts[name]
        assert found.mean() == pytest.approx(mean, rel=0.005)
        away = found - found.mean()
        product = (away[:, :, 1:] * away[:, :, :-1]).mean()
        # a product of two nearly independent counts has sd close to the mean
        assert product == pytest.approx(covariance, abs=5.0 * mean / pairs**0.5)
    assert expected > 0.05 * mean
    # sums over blocks scatter more than their pixels say, by the shared photons
    blocks = counts["together"].reshape(EXPOSURES, 4, 8, 4, 8).sum(axis=(2, 4))
    assert blocks.var() > 1.2 * 64 * mean
