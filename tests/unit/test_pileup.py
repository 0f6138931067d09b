"""Level crossing: cases side by side, and the parts of a pulse."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.physics.pileup import PulseShape, _scaled, crossing_rate


def test_cases_do_not_touch_each_other() -> None:
    rng = np.random.default_rng(1)
    pulses = rng.random((3, 100)) * np.array([[1e3], [1e5], [1e6]])
    shape = PulseShape(dead_time_ns=80.0, tail_ns=20.0)
    noise = np.array([0.5, 1.0, 2.0])
    together = crossing_rate(pulses, shape, step_kev=0.5, noise_kev=noise)
    for i in range(3):
        alone = crossing_rate(
            pulses[i : i + 1], shape, step_kev=0.5, noise_kev=noise[i]
        )
        np.testing.assert_allclose(together[i], alone[0], rtol=1e-12)


def test_lowered_pulses_keep_number_and_mean_height() -> None:
    pulses = np.random.default_rng(2).random((2, 60))
    level = np.arange(60)
    for factor in (0.0, 0.3, 0.5, 0.77):
        lowered = _scaled(pulses, factor)
        np.testing.assert_allclose(lowered.sum(axis=1), pulses.sum(axis=1))
        np.testing.assert_allclose(lowered @ level, factor * (pulses @ level))


def test_a_tail_of_no_height_or_full_height_is_no_tail_or_dead_time() -> None:
    pulses = np.zeros((1, 80))
    pulses[0, [30, 45, 60]] = 1e6
    none = crossing_rate(pulses, PulseShape(dead_time_ns=100.0), step_kev=0.5)
    flat = PulseShape(dead_time_ns=100.0, tail_ns=50.0, tail_height=0.0)
    np.testing.assert_allclose(crossing_rate(pulses, flat, step_kev=0.5), none)
    longer = crossing_rate(pulses, PulseShape(dead_time_ns=140.0), step_kev=0.5)
    # a tail of (nearly) full height; 1 itself would need a point beyond the grid
    tall = PulseShape(dead_time_ns=100.0, tail_ns=40.0, tail_height=1.0 - 1e-9)
    np.testing.assert_allclose(
        crossing_rate(pulses, tall, step_kev=0.5), longer, rtol=1e-6, atol=1.0
    )


def test_length_of_the_transform_does_not_matter() -> None:
    pulses = np.zeros((1, 100))
    pulses[0, 20:60] = 2e4
    shape = PulseShape(dead_time_ns=100.0)
    short = crossing_rate(pulses, shape, step_kev=0.5, noise_kev=1.0, size=512)
    long = crossing_rate(pulses, shape, step_kev=0.5, noise_kev=1.0, size=4096)
    # 256 keV hold all but 1e-8 of the sums of pulses up to 30 keV
    np.testing.assert_allclose(short, long, rtol=1e-7, atol=0.1)


def test_effective_dead_time() -> None:
    assert PulseShape(dead_time_ns=100.0).effective_ns == 100.0
    tail = PulseShape(dead_time_ns=100.0, tail_ns=40.0, tail_height=0.5)
    assert tail.effective_ns == pytest.approx(120.0)
