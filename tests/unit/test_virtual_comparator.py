"""Comparators of the virtual detector, by trains small enough to count by hand."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.kernels import comparator, pulse_train, pulse_train_numpy
from spectral.kernels.random_stream import substream_array, uniform, uniform_array

if TYPE_CHECKING:
    from numpy.typing import NDArray

SHAPES = (comparator.RECTANGLE, comparator.EXPONENTIAL, comparator.CR_RC)


def crossings(
    shape: int,
    times: list[float] | NDArray[np.float64],
    heights: list[float] | NDArray[np.float64],
    levels: list[float],
    *,
    pulse_time: float,
    end: float,
    cut: int | None = None,
) -> NDArray[np.int64]:
    """Counts of one train, handed over in one piece or in two."""
    t, h = np.asarray(times, float), np.asarray(heights, float)
    state = np.zeros(comparator.STATE)
    state[2] = -1e9
    ring = np.empty((2, comparator.RING))
    counts = np.zeros(len(levels), np.int64)
    for part in (slice(None, cut), slice(cut, None)) if cut else (slice(None),):
        comparator.count_crossings(
            shape, t[part], h[part], t[part].size, pulse_time, np.array(levels), state,
            ring, counts,
        )  # fmt: skip
    if shape == comparator.CR_RC:
        comparator.finish_train(end, pulse_time, np.array(levels), state, counts)
    return counts


@pytest.mark.parametrize(
    ("times", "heights", "expected"),
    [
        # levels 20, 50, 90; width 10
        ([0.0], [60.0], [1, 1, 0]),
        ([0.0, 20.0], [60.0, 60.0], [2, 2, 0]),  # apart: two each
        ([0.0, 5.0], [60.0, 60.0], [1, 1, 1]),  # overlap: one, and the sum passes 90
        ([0.0, 5.0, 12.0], [60.0, 60.0, 60.0], [1, 1, 2]),  # 60, 120, 60, 120
        ([0.0, 5.0], [15.0, 15.0], [1, 0, 0]),  # two small ones make one count
        ([0.0, 10.0], [60.0, 60.0], [2, 2, 0]),  # one ends as the next comes
        ([-5.0, 2.0], [60.0, 60.0], [0, 0, 1]),  # the first came before the start
    ],
)
def test_rectangles_by_hand(
    times: list[float], heights: list[float], expected: list[int]
) -> None:
    found = crossings(
        comparator.RECTANGLE, times, heights, [20.0, 50.0, 90.0],
        pulse_time=10.0, end=100.0,
    )  # fmt: skip
    assert found.tolist() == expected


def test_exponential_by_hand() -> None:
    # 60 at 0 decays to 30 after 10 ln 2 and to 20 after 10 ln 3: only the second
    # interval brings the signal back below 25
    for gap, expected in ((10 * np.log(2.0), [1, 1]), (10 * np.log(3.0), [2, 0])):
        found = crossings(
            comparator.EXPONENTIAL, [0.0, gap], [60.0, 60.0], [25.0, 85.0],
            pulse_time=10.0, end=100.0,
        )  # fmt: skip
        assert found.tolist() == expected


def test_semi_gaussian_has_its_peak_at_the_height() -> None:
    found = crossings(
        comparator.CR_RC, [0.0], [60.0], [59.999, 60.001], pulse_time=10.0, end=100.0
    )
    assert found.tolist() == [1, 0]


def test_semi_gaussian_matches_a_sampled_waveform() -> None:
    # independent of the recursion: the sum of pulses on a fine grid, counted there
    rng = np.random.default_rng(3)
    times = np.cumsum(rng.exponential(15.0, 300))
    heights = rng.uniform(10.0, 80.0, 300)
    levels = [20.0, 45.0, 90.0]
    end = float(times[-1] + 200.0)
    grid = np.arange(0.0, end, 0.01)
    wave = np.zeros(grid.size)
    for t, h in zip(times, heights, strict=True):
        s = np.maximum(grid - t, 0.0) / 10.0
        wave += h * s * np.exp(1.0 - s)
    sampled = [int(((wave[:-1] < u) & (wave[1:] >= u)).sum()) for u in levels]
    found = crossings(
        comparator.CR_RC, times, heights, levels, pulse_time=10.0, end=end
    )
    assert found.tolist() == sampled


@pytest.mark.parametrize("shape", SHAPES)
def test_compiled_counts_equal_the_numpy_twin(shape: int) -> None:
    rng = np.random.default_rng(8)
    for spacing in (3.0, 10.0, 50.0):
        times = np.cumsum(rng.exponential(spacing, 700)) - 40.0
        heights = rng.uniform(0.0, 90.0, 700)
        levels = [15.0, 30.0, 60.0, 120.0]
        end = float(times[-1] + 3.0)
        whole = crossings(shape, times, heights, levels, pulse_time=10.0, end=end)
        parts = crossings(
            shape, times, heights, levels, pulse_time=10.0, end=end, cut=333
        )
        twin = pulse_train_numpy.count_crossings(
            shape, times, heights, 10.0, np.array(levels), end
        )
        assert whole.tolist() == parts.tolist() == twin.tolist()


@pytest.mark.parametrize("shape", SHAPES)
def test_compiled_trains_equal_the_numpy_twin(shape: int) -> None:
    rng = np.random.default_rng(21)
    quantiles = np.sort(rng.uniform(2.0, 80.0, (6, 33)).astype(np.float32), axis=1)
    spectrum = rng.uniform(0.5, 1.5, 6)
    pulses_per_photon = rng.uniform(0.5, 1.5, 6)
    attenuation = rng.uniform(0.1, 1.0, (2, 6))
    areal = np.array([[0.3, 0.0], [0.1, 0.5]])
    flux, noise_rate = np.array([0.004, 0.005]), np.array([0.001, 0.0])
    levels = np.array([[10.0, 30.0, 60.0], [11.0, 29.0, 66.0]])
    gain, noise = np.array([1.02, 0.98]), np.array([2.0, 1.5])
    floor, width = np.array([7.0, 7.7]), np.array([20.0, 25.0])
    counts = np.zeros((2, 3), np.int64)
    key, duration = np.uint64(987654321), 2.0e4
    pulse_train.expose_pixels(
        key, 0, 2, duration, shape, spectrum, attenuation, areal, flux,
        pulses_per_photon, quantiles, levels, gain, noise, noise_rate, floor, width,
        counts,
    )  # fmt: skip
    for i in range(2):
        depth = areal[:, i] @ attenuation
        weights = np.append(
            flux[i] * spectrum * pulses_per_photon * np.exp(-depth), noise_rate[i]
        )
        threshold, other = np.empty(7), np.empty(7, np.int64)
        pulse_train.fill_alias(weights, threshold, other, np.empty(7, np.int64))
        times, heights = pulse_train_numpy.draw_pulses(
            pulse_train_numpy.pixel_stream(key, i), 1024, -12.0 * width[i], weights,
            threshold, other, quantiles, gain[i], noise[i], floor[i],
        )  # fmt: skip
        assert times[-1] > duration
        inside = times < duration
        twin = pulse_train_numpy.count_crossings(
            shape, times[inside], heights[inside], width[i], levels[i], duration
        )
        assert counts[i].tolist() == twin.tolist()


def test_alias_table_gives_back_its_weights() -> None:
    weights = np.random.default_rng(4).uniform(0.0, 1.0, 37) ** 3
    weights[5] = 0.0
    threshold, other = np.empty(37), np.empty(37, np.int64)
    total = pulse_train.fill_alias(weights, threshold, other, np.empty(37, np.int64))
    chance = threshold.copy()
    np.add.at(chance, other, 1.0 - threshold)
    assert total == pytest.approx(weights.sum(), rel=1e-14)
    np.testing.assert_allclose(chance / 37, weights / weights.sum(), atol=1e-14)


def test_random_words_are_the_published_sequence() -> None:
    # first words of the generator from seed 1234567, as widely printed (from memory);
    # draws keep their upper 52 bits
    words = np.array([6457827717110365317, 3203168211198807973, 9817491932198370423])
    seed = np.array([1234567], np.uint64)
    drawn = uniform_array(seed, np.arange(3, dtype=np.uint64))
    np.testing.assert_allclose(drawn, words / 2.0**64, atol=2.0**-52)


def test_scalar_and_array_streams_agree_and_are_even() -> None:
    key = substream_array(np.array([7], np.uint64), np.array([3], np.uint64))
    drawn = uniform_array(key, np.arange(100_000, dtype=np.uint64))
    assert [uniform(key[0], np.uint64(i)) for i in range(50)] == drawn[:50].tolist()
    assert 0.0 < drawn.min() < drawn.max() < 1.0
    counts, _ = np.histogram(drawn, bins=100, range=(0.0, 1.0))
    chi_square = float(((counts - 1000.0) ** 2 / 1000.0).sum())
    assert 50.0 < chi_square < 170.0  # 99 degrees of freedom, beyond 4 sd either side
