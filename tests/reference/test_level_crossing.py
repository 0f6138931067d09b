"""Pile-up by level crossing, against counters simulated pulse by pulse."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest
from scipy import fft
from scipy.special import erfc

from spectral.errors import InputError
from spectral.physics.pileup import PulseShape, crossing_rate
from spectral.physics.pulse_family import tail_height

if TYPE_CHECKING:
    from numpy.typing import NDArray

pytestmark = pytest.mark.reference

STEP_KEV = 0.5
GRID = 480
LEVEL_KEV = STEP_KEV * np.arange(GRID)
DEAD_NS = 100.0


def heights() -> NDArray[np.float64]:
    """A made-up spectrum from 20 to 90 keV, on the grid, adding up to 1."""
    inside = np.abs(LEVEL_KEV - 55.0) <= 35.0
    shape = np.exp(-0.5 * ((LEVEL_KEV - 48.0) / 16.0) ** 2) * inside
    return np.asarray(shape / shape.sum())


def rate_of(x: float) -> float:
    """Pulses per second at which rate times dead time is x."""
    return x / (DEAD_NS * 1e-9)


@pytest.mark.parametrize(
    ("x", "recorded"),
    [
        # x exp(-x), the paralysable counter (D. F. Yu, J. A. Fessler, Phys. Med. Biol.
        # 45 (2000) 2043), six digits worked out by hand
        (0.01, 0.0099005),
        (0.05, 0.0475615),
        (0.1, 0.0904837),
        (0.2, 0.1637462),
        (0.5, 0.3032653),
        (0.9, 0.3659127),
        (1.0, 0.3678794),
        (2.0, 0.2706706),
    ],
)
def test_below_the_smallest_pulse_the_paralysable_law_holds(
    x: float, recorded: float
) -> None:
    pulses = heights()[None] * rate_of(x)
    crossed = crossing_rate(
        pulses, PulseShape(dead_time_ns=DEAD_NS), step_kev=STEP_KEV, size=4096
    )
    low = (LEVEL_KEV > 1.0) & (LEVEL_KEV < 19.5)
    np.testing.assert_allclose(
        crossed[0, low] * DEAD_NS * 1e-9, recorded, rtol=1e-5, atol=0.0
    )


@pytest.mark.parametrize("x", [0.0, 0.05, 0.3, 1.0, 2.0])
def test_crossings_of_all_levels_add_up_to_the_energy_that_came(x: float) -> None:
    # a rectangle lifts the signal by its own height, whatever it meets: the integral
    # of the crossing rate over all levels is rate times mean energy, with any pile-up
    rate = max(rate_of(x), 1.0)
    small = np.zeros(GRID)
    small[[20, 30, 50]] = 0.5, 0.3, 0.2  # 10, 15, 25 keV: sums of nine fit the grid
    crossed = crossing_rate(
        small[None] * rate,
        PulseShape(dead_time_ns=DEAD_NS),
        step_kev=STEP_KEV,
        size=4096,
    )
    # level 0 is where the signal rests: half of the crossings there are counted, as
    # the trapezoidal rule asks
    found = crossed.sum() * STEP_KEV
    assert found == pytest.approx(rate * (small @ LEVEL_KEV), rel=1e-5)


def test_without_pile_up_the_curve_is_the_sum_above_the_level() -> None:
    pulses = heights()[None] * 100.0
    crossed = crossing_rate(
        pulses, PulseShape(dead_time_ns=0.0), step_kev=STEP_KEV, size=1024
    )[0]
    # at a grid point half of the pulses of just that height cross
    above = pulses[0][::-1].cumsum()[::-1] - 0.5 * pulses[0]
    np.testing.assert_allclose(crossed[1:], above[1:], atol=1e-10)


def simulated(
    rng: np.random.Generator, rate: float, shape: PulseShape, levels: list[float]
) -> tuple[NDArray[np.int64], float]:
    """Crossings of each level by a signal summed up nanosecond by nanosecond."""
    samples = 2**21
    arrivals = rng.poisson(rate * samples * 1e-9)
    signal = np.zeros(samples)
    energy = rng.choice(LEVEL_KEV, arrivals, p=heights())
    np.add.at(signal, rng.integers(0, samples, arrivals), energy)
    time = np.arange(4096.0)
    n, scale = shape.order, max(shape.tail_ns, 1e-9)
    top = n * scale
    # the peak is held: the time stands still there
    inner = np.where(time < top, time, np.maximum(time - shape.dead_time_ns, top))
    inner /= scale
    with np.errstate(divide="ignore"):
        pulse = np.exp(n * (np.log(inner / n) + 1.0) - inner)
    if shape.tail_ns == 0.0:
        pulse = (time < shape.dead_time_ns).astype(float)
    signal = fft.irfft(fft.rfft(signal) * fft.rfft(pulse, samples), samples)
    before, after = np.roll(signal, 1), signal
    counts = [int(((before < u) & (after >= u)).sum()) for u in levels]
    return np.array(counts), samples * 1e-9


@pytest.mark.slow
@pytest.mark.parametrize("x", [0.1, 0.5])
@pytest.mark.parametrize(
    ("dead_time_ns", "tail_ns", "order"),
    [(100.0, 0.0, 1.0), (0.0, 40.0, 1.0), (0.0, 25.0, 3.0), (50.0, 20.0, 0.5)],
)
def test_counting_curve_equals_a_simulated_counter(
    x: float, dead_time_ns: float, tail_ns: float, order: float
) -> None:
    rng = np.random.default_rng(6)
    shape = PulseShape(
        dead_time_ns=dead_time_ns, tail_ns=tail_ns, tail_height=tail_height(order)
    )
    rate = x / (shape.effective_ns * 1e-9)
    # levels half way between grid points, where no sum of pulses stands exactly
    levels = [10.25, 25.25, 40.25, 60.25, 80.25, 110.25, 140.25]
    seen = [simulated(rng, rate, shape, levels) for _ in range(6)]
    counts = sum(c for c, _ in seen)
    duration = sum(t for _, t in seen)
    crossed = crossing_rate(heights()[None] * rate, shape, step_kev=STEP_KEV, size=4096)
    # half way between grid points the curve of a discrete spectrum is flat; the grid
    # points hold the mean of both sides, so read the step between them
    place = (np.array(levels) / STEP_KEV).astype(int)
    expected = duration * 0.5 * (crossed[0, place] + crossed[0, place + 1])
    # four standard errors (a counter with dead time scatters less than Poisson)
    assert np.all(np.abs(counts - expected) < 4.0 * np.sqrt(np.maximum(expected, 20.0)))


@pytest.mark.parametrize("order", [0.5, 1.0, 3.0])
def test_pulses_that_rise_together_are_counted_once(order: float) -> None:
    # two pulses within the rise make one; the fewer crossings, the more they overlap
    shape = PulseShape(dead_time_ns=0.0, tail_ns=30.0, tail_height=tail_height(order))
    rate = 0.3 / (shape.effective_ns * 1e-9)
    crossed = crossing_rate(heights()[None] * rate, shape, step_kev=STEP_KEV, size=4096)
    total = crossed.sum() * STEP_KEV / (rate * (heights() @ LEVEL_KEV))
    assert 0.75 < total < 0.98
    assert np.all(crossed[0, 4:200] < rate)


def test_noise_gives_the_error_function_of_a_threshold_scan() -> None:
    # pulses of one height E under noise sigma: (n/2) erfc((U - E) / (sqrt2 sigma)), the
    # usual form of a threshold scan (common practice, no source)
    pulses = np.zeros((2, GRID))
    pulses[:, 120] = 1000.0
    crossed = crossing_rate(
        pulses,
        PulseShape(dead_time_ns=0.0),
        step_kev=STEP_KEV,
        noise_kev=np.array([1.5, 4.0]),
        size=2048,
    )
    for curve, noise in zip(crossed, (1.5, 4.0), strict=True):
        # summing by the trapezoidal rule acts like a variance larger by step^2 / 6
        wide = np.sqrt(noise**2 + STEP_KEV**2 / 6.0)
        expected = 500.0 * erfc((LEVEL_KEV - 60.0) / (np.sqrt(2.0) * wide))
        # from 20 keV, so that the noise around the resting signal is far away
        np.testing.assert_allclose(curve[40:], expected[40:], atol=0.1)


def test_noise_smooths_the_counting_curve() -> None:
    # normal noise at the comparator convolves the curve with its own density
    pulses = heights()[None] * rate_of(0.3)
    shape = PulseShape(dead_time_ns=DEAD_NS, tail_ns=30.0)
    plain = crossing_rate(pulses, shape, step_kev=STEP_KEV, size=4096)[0]
    noisy = crossing_rate(pulses, shape, step_kev=STEP_KEV, noise_kev=2.5, size=4096)[0]
    reach = np.arange(-30, 31)
    kernel = np.exp(-0.5 * (reach * STEP_KEV / 2.5) ** 2)
    smoothed = np.convolve(plain, kernel / kernel.sum(), "same")
    middle = slice(60, 400)
    np.testing.assert_allclose(
        noisy[middle], smoothed[middle], rtol=2e-4, atol=1e-5 * rate_of(0.3)
    )


def test_pulses_of_no_height_do_not_matter_and_the_input_stays() -> None:
    pulses = heights()[None] * rate_of(0.2)
    with_nothing = pulses.copy()
    with_nothing[:, 0] = 1e9
    kept = with_nothing.copy()
    shape = PulseShape(dead_time_ns=DEAD_NS)
    np.testing.assert_array_equal(
        crossing_rate(pulses, shape, step_kev=STEP_KEV),
        crossing_rate(with_nothing, shape, step_kev=STEP_KEV),
    )
    np.testing.assert_array_equal(with_nothing, kept)


def test_too_short_a_transform_is_refused() -> None:
    pulses = heights()[None]
    with pytest.raises(InputError, match="needs size >= 960 and times >= 0"):
        crossing_rate(pulses, PulseShape(dead_time_ns=1.0), step_kev=0.5, size=512)
    with pytest.raises(InputError, match=r"-1\.0 ns"):
        crossing_rate(pulses, PulseShape(dead_time_ns=-1.0), step_kev=0.5)
