"""Covariance of the bins against a counter simulated nanosecond by nanosecond."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import fft

from spectral.forward.counting_model import CountingModel, counts_to_bins
from spectral.forward.overlap_scatter import overlap_excess
from spectral.physics.pileup import PulseShape, crossing_rate
from spectral.physics.pileup_scatter import overlap_covariance
from spectral.physics.pulse_family import tail_height

pytestmark = pytest.mark.reference

STEP_KEV = 0.5
LEVELS = np.array([15.25, 30.25, 45.25])
TAIL_NS, ORDER = 30.0, 2.0
SHAPE = PulseShape(dead_time_ns=0.0, tail_ns=TAIL_NS, tail_height=tail_height(ORDER))
WINDOW = 4096
"""Nanoseconds of one exposure."""


def heights() -> np.ndarray:
    """A made-up spectrum from 20 to 60 keV with a tail of small pulses."""
    level = STEP_KEV * np.arange(200)
    shape = np.exp(-0.5 * ((level - 40.0) / 8.0) ** 2)
    shape += 0.15 * ((level > 3.0) & (level < 40.0))
    return np.asarray(shape / shape.sum())


def simulated(rng: np.random.Generator, rate: float) -> np.ndarray:
    """Bin counts of exposures that follow each other, shape (exposure, bin)."""
    samples = 2**21
    arrivals = rng.poisson(rate * samples * 1e-9)
    signal = np.zeros(samples)
    energy = STEP_KEV * rng.choice(200, arrivals, p=heights())
    np.add.at(signal, rng.integers(0, samples, arrivals), energy)
    time = np.arange(1.0, 2048.0) / TAIL_NS
    pulse = np.exp(ORDER * (np.log(time / ORDER) + 1.0) - time)
    signal = fft.irfft(fft.rfft(signal) * fft.rfft(pulse, samples), samples)
    before = np.roll(signal, 1)
    risen = (before < LEVELS[:, None]) & (signal >= LEVELS[:, None])
    above = risen.reshape(LEVELS.size, -1, WINDOW).sum(axis=2)
    return counts_to_bins(above.T.astype(float))


@pytest.mark.slow
def test_covariance_is_that_of_a_simulated_counter() -> None:
    rng = np.random.default_rng(8)
    rate = 0.12 / (SHAPE.effective_ns * 1e-9)
    bins = np.concatenate([simulated(rng, rate) for _ in range(16)])
    seen = np.cov(bins.T)
    pulses = heights()[None] * rate
    curve = crossing_rate(pulses, SHAPE, step_kev=STEP_KEV, size=1024)[0]
    mean = counts_to_bins(np.interp(LEVELS, STEP_KEV * np.arange(200), curve))
    mean *= WINDOW * 1e-9
    np.testing.assert_allclose(bins.mean(axis=0), mean, rtol=0.02)
    lost = 2.0 * SHAPE.effective_ns / WINDOW
    plain = np.diag(mean) - lost * np.outer(mean, mean)
    added = overlap_covariance(pulses, SHAPE, LEVELS, step_kev=STEP_KEV)[0]
    whole = plain + added * WINDOW * 1e-9
    size = np.sqrt(np.outer(mean, mean))
    # 8192 exposures know a covariance to 0.016 of its size; overlaps of three pulses
    # are left out. Without what overlaps add it would be wrong by 0.2 and more.
    np.testing.assert_allclose(seen / size, whole / size, atol=0.07)
    assert np.abs((seen - plain) / size).max() > 0.15


def model() -> CountingModel:
    energy = np.arange(20.0, 60.0)
    level = STEP_KEV * np.arange(200)
    peak = np.exp(-0.5 * ((level - energy[:, None]) / 1.5) ** 2)
    tail = 0.01 * ((level > 3.0) & (level < energy[:, None]))
    return CountingModel(
        energy_kev=energy,
        spectrum=np.full(40, 1.0 / 40.0),
        attenuation=np.stack([0.2 + 4e3 / energy**3, 0.15 + 3e4 / energy**3]),
        heights=0.8 * peak / peak.sum(axis=1, keepdims=True) + tail,
        step_kev=STEP_KEV,
        noise_kev=1.0,
        shape=SHAPE,
    )


def test_excess_per_rate_does_not_depend_on_the_rate() -> None:
    largest = np.array([4.0, 1.0])
    found = [overlap_excess(model(), LEVELS, largest, rate) for rate in (1e4, 1e5, 4e5)]
    assert found[0] > 0.3
    np.testing.assert_allclose(found, found[0], rtol=0.15)


def test_a_rectangle_has_no_excess() -> None:
    flat = replace(model(), shape=PulseShape(dead_time_ns=100.0))
    assert overlap_excess(flat, LEVELS, np.array([4.0, 1.0]), 1e5) == 0.0
