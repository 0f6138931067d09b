"""Level crossing: cases side by side, and the family of pulses."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import gammaln, lambertw

from spectral.errors import InputError
from spectral.physics.pileup import PulseShape, crossing_rate
from spectral.physics.pulse_family import (
    order_of_tail,
    pulse_integrals,
    pulse_nodes,
    tail_height,
    width_over_time,
)


def test_cases_do_not_touch_each_other() -> None:
    rng = np.random.default_rng(1)
    pulses = rng.random((20, 100)) * np.geomspace(1e3, 1e5, 20)[:, None]
    shape = PulseShape(dead_time_ns=80.0, tail_ns=20.0)
    noise = np.linspace(0.5, 2.0, 20)
    together = crossing_rate(pulses, shape, step_kev=0.5, noise_kev=noise)
    for i in (0, 7, 16, 19):
        alone = crossing_rate(
            pulses[i : i + 1], shape, step_kev=0.5, noise_kev=noise[i]
        )
        # frequencies that the least noise leaves out: 1e-8 of a case's counts
        np.testing.assert_allclose(
            together[i], alone[0], rtol=1e-6, atol=1e-6 * pulses[i].sum()
        )


def test_rate_and_times_come_in_products_only() -> None:
    pulses = np.random.default_rng(2).random((2, 90)) * 3e4
    slow = PulseShape(dead_time_ns=60.0, tail_ns=40.0, tail_height=0.8)
    fast = PulseShape(dead_time_ns=20.0, tail_ns=40.0 / 3.0, tail_height=0.8)
    np.testing.assert_allclose(
        crossing_rate(3.0 * pulses, fast, step_kev=0.5),
        3.0 * crossing_rate(pulses, slow, step_kev=0.5),
        rtol=1e-9,
        atol=1e-6,
    )


def test_heights_and_levels_stretch_together() -> None:
    pulses = np.random.default_rng(3).random((1, 90)) * 2e4
    shape = PulseShape(dead_time_ns=0.0, tail_ns=50.0)
    np.testing.assert_allclose(
        crossing_rate(pulses, shape, step_kev=0.5, noise_kev=1.0),
        crossing_rate(pulses, shape, step_kev=1.0, noise_kev=2.0),
        rtol=1e-6,
    )


def test_without_rise_and_fall_a_pulse_is_a_rectangle() -> None:
    pulses = np.zeros((1, 80))
    pulses[0, [30, 45, 60]] = 1e6
    rectangle = crossing_rate(pulses, PulseShape(dead_time_ns=100.0), step_kev=0.5)
    brief = PulseShape(dead_time_ns=100.0, tail_ns=1e-4, tail_height=0.9)
    np.testing.assert_allclose(
        crossing_rate(pulses, brief, step_kev=0.5), rectangle, rtol=1e-4, atol=30.0
    )


def test_length_of_the_transform_does_not_matter() -> None:
    pulses = np.zeros((1, 100))
    pulses[0, 20:60] = 2e4
    shape = PulseShape(dead_time_ns=100.0)
    short = crossing_rate(pulses, shape, step_kev=0.5, noise_kev=1.0, size=512)
    long = crossing_rate(pulses, shape, step_kev=0.5, noise_kev=1.0, size=4096)
    # 256 keV hold all but 1e-8 of the sums of pulses up to 30 keV
    np.testing.assert_allclose(short, long, rtol=1e-7, atol=0.1)
    smooth = PulseShape(dead_time_ns=10.0, tail_ns=40.0)
    short = crossing_rate(pulses, smooth, step_kev=0.5, noise_kev=1.0, size=512)
    long = crossing_rate(pulses, smooth, step_kev=0.5, noise_kev=1.0, size=2048)
    np.testing.assert_allclose(short[:, 20:60], long[:, 20:60], rtol=2e-4)


def test_nothing_comes_nothing_is_counted() -> None:
    none = crossing_rate(
        np.zeros((2, 50)), PulseShape(dead_time_ns=10.0, tail_ns=40.0), step_kev=0.5
    )
    np.testing.assert_array_equal(none, 0.0)


def test_time_above_half_the_peak() -> None:
    assert PulseShape(dead_time_ns=100.0).effective_ns == 100.0
    # (t/T) exp(1 - t/T) = 1/2 at t/T = -W(-1 / 2e), both branches of Lambert's W
    low, high = (-lambertw(-0.5 / np.e, branch).real for branch in (0, -1))
    one = PulseShape(dead_time_ns=100.0, tail_ns=40.0, tail_height=2.0 / np.e)
    assert one.effective_ns == pytest.approx(100.0 + 40.0 * (high - low))
    # a large order tends to a normal curve of variance n: 2 sqrt(2 ln 2) sigma
    normal = np.sqrt(8.0 * np.log(2.0) * 150.0)
    assert width_over_time(150.0) == pytest.approx(normal, rel=1e-3)


@pytest.mark.parametrize("order", [0.05, 0.4, 1.0, 2.5, 8.0])
def test_quadrature_of_a_pulse(order: float) -> None:
    pulse, slope, weight = pulse_nodes(order)
    # Euler's integral: n^-n e^n Gamma(n + 1)
    area = np.exp(order - order * np.log(order) + gammaln(order + 1.0))
    assert pulse @ weight == pytest.approx(area, rel=2e-5)
    # up by 1 and down by 1
    assert np.abs(slope) @ weight == pytest.approx(2.0, rel=1e-3)
    assert slope @ weight == pytest.approx(0.0, abs=1e-3)
    assert order_of_tail(tail_height(order)) == pytest.approx(order, rel=1e-6)


def test_integrals_of_no_height_and_no_frequency_vanish() -> None:
    integrals = pulse_integrals(1.5, 6, 10.0, 40, 0.02)
    few = integrals.change.shape[1] // integrals.share.size
    change = integrals.change.reshape(6, integrals.share.size, few)
    np.testing.assert_allclose(integrals.level[0], 0.0, atol=1e-12)
    np.testing.assert_allclose(integrals.level[:, 0], 0.0, atol=1e-12)
    np.testing.assert_allclose(change[0], 0.0, atol=1e-12)
    # the mean height of a pulse is its area: slope of the integral at frequency 0
    pulse, _, weight = pulse_nodes(1.5)
    small = pulse_integrals(1.5, 2, 1.0, 2, 1e-4)
    assert small.level[1, 1].imag == pytest.approx(-1e-4 * (pulse @ weight), rel=1e-6)


def test_a_tail_that_no_order_gives_is_refused() -> None:
    pulses = np.ones((1, 50))
    shape = PulseShape(dead_time_ns=0.0, tail_ns=40.0, tail_height=0.2)
    with pytest.raises(InputError, match=r"tail_height must lie in 0\.4284 to 0\.9975"):
        crossing_rate(pulses, shape, step_kev=0.5)
