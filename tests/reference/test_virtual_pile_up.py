"""Pulse trains of the virtual detector against published laws of counting."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import pytest
from scipy.special import gamma

from spectral.kernels import comparator
from spectral.kernels.pulse_train import expose_pixels

if TYPE_CHECKING:
    from numpy.typing import NDArray

pytestmark = [pytest.mark.reference, pytest.mark.slow]
WIDTH = 100.0


def expose(
    shape: int,
    x: float,
    heights_kev: NDArray[np.float64],
    levels: list[float],
    *,
    exposures: int,
    widths: float,
    seed: int,
) -> NDArray[np.int64]:
    """Counts (exposure, level) at x pulses per width, in exposures of many widths."""
    heights = np.atleast_2d(np.quantile(heights_kev, np.linspace(0, 1, 4097)))
    one = np.ones(exposures)
    counts = np.zeros((exposures, len(levels)), np.int64)
    expose_pixels(
        np.uint64(seed), 0, exposures, widths * WIDTH, shape, np.ones(1),
        np.zeros((1, 1)), np.zeros((1, exposures)), one * x / WIDTH, np.ones(1),
        heights.astype(np.float32), np.tile(levels, (exposures, 1)), one, 0.0 * one,
        0.0 * one, one, one * WIDTH, counts,
    )  # fmt: skip
    return counts


@pytest.mark.parametrize("x", [0.05, 0.2, 0.5, 1.0, 2.0])
def test_mean_and_variance_of_counts_with_dead_time(x: float) -> None:
    # D. F. Yu, J. A. Fessler, Phys. Med. Biol. 45 (2000) 2043: paralyzable counting,
    # exact for exposures of T >= tau (formula from memory, derived again: a count
    # needs tau without arrival before it)
    exposures, widths = 40_000, 200.0
    heights = np.array([60.0, 60.0])
    counts = expose(
        comparator.RECTANGLE, x, heights, [30.0],
        exposures=exposures, widths=widths, seed=int(1000 * x),
    )[:, 0]  # fmt: skip
    mean = x * widths * math.exp(-x)
    variance = mean * (1.0 - (2.0 * x - x / widths) * math.exp(-x))
    # beyond four standard errors; that of a variance is sqrt(2/n) of it
    assert counts.mean() == pytest.approx(mean, abs=4.0 * (variance / exposures) ** 0.5)
    assert counts.var() == pytest.approx(variance, rel=4.0 * (2.0 / exposures) ** 0.5)
    assert counts.var() < 0.95 * counts.mean()


def level_crossing_rate(
    heights: NDArray[np.float64], x: float, levels: list[float]
) -> NDArray[np.float64]:
    """Counts per pulse of a rectangular train: P(X < U) - P(X + E < U).

    X is compound Poisson; its law by the series over the number of pulses that stand,
    sampled heights convolved as histograms of 0.1 keV.
    """
    step, size = 0.1, 8192
    cell = (heights / step + 0.5).astype(int)
    single = np.bincount(cell, minlength=size)[:size] / heights.size
    law, power = np.zeros(size), np.zeros(size)
    power[0] = 1.0
    transform = np.fft.rfft(single, 2 * size)
    for m in range(25):
        law += math.exp(-x) * x**m / math.factorial(m) * power
        power = np.fft.irfft(np.fft.rfft(power, 2 * size) * transform)[:size]
    risen = np.fft.irfft(np.fft.rfft(law, 2 * size) * transform)[:size]
    at = (np.array(levels) / step + 0.5).astype(int)
    return np.asarray(np.cumsum(law)[at - 1] - np.cumsum(risen)[at - 1])


@pytest.mark.parametrize("x", [0.1, 0.3, 1.0])
def test_rectangles_follow_the_level_crossing_form(x: float) -> None:
    # level-crossing view of pile-up: E. Roessl, H. Daerr, R. Proksa, Med. Phys. 43
    # (2016) 1295; for pulses that rise at once crossings happen only at arrivals, so
    # the rate is n [P(X < U) - P(X + E < U)] (derived here)
    rng = np.random.default_rng(17)
    heights = rng.normal(60.0, 18.0, 400_000)
    heights = heights[(heights > 20.0) & (heights < 100.0)]
    levels = [15.0, 30.0, 50.0, 70.0, 90.0, 120.0]
    exposures, widths = 400, 20_000.0
    counts = expose(
        comparator.RECTANGLE, x, heights, levels,
        exposures=exposures, widths=widths, seed=5,
    )  # fmt: skip
    expected = level_crossing_rate(heights, x, levels) * x * widths
    error = counts.std(axis=0) / exposures**0.5
    # four standard errors and the 0.05 keV that histograms may shift a level by
    np.testing.assert_array_less(
        np.abs(counts.mean(axis=0) - expected), 4.0 * error + 2e-3 * expected
    )


@pytest.mark.parametrize("x", [0.1, 0.5, 1.0])
def test_exponentials_of_one_height_follow_their_closed_form(x: float) -> None:
    # the sum of exponential pulses of one height E has, below E, the distribution
    # function exp(-g x) (u/E)^x / Gamma(1 + x), g Euler's constant (generalised
    # Dickman law: W. Vervaat, Adv. Appl. Probab. 11 (1979) 750, from memory); a level
    # U <= E is crossed at each arrival that finds the sum below it
    levels = [15.0, 30.0, 55.0]
    exposures, widths = 400, 20_000.0
    counts = expose(
        comparator.EXPONENTIAL, x, np.array([60.0, 60.0]), levels,
        exposures=exposures, widths=widths, seed=6,
    )  # fmt: skip
    below = np.exp(-np.euler_gamma * x) * (np.array(levels) / 60.0) ** x
    expected = x * widths * below / gamma(1.0 + x)
    error = counts.std(axis=0) / exposures**0.5
    np.testing.assert_array_less(np.abs(counts.mean(axis=0) - expected), 4.0 * error)


def test_semi_gaussians_lose_what_follows_too_closely() -> None:
    # at low rate a pulse is lost if the sum of it and the one before never dips below
    # the level between their peaks; the closest distance with a dip, found on a grid of
    # two-pulse waveforms, takes the place of the dead time of the paralyzable law
    s = np.arange(0.0, 12.0, 0.002)
    pulse = 60.0 * s * np.exp(1.0 - s)
    for shift in range(500, 2500, 5):
        both = pulse.copy()
        both[shift:] += pulse[: s.size - shift]
        risen = (both[:-1] < 30.0) & (both[1:] >= 30.0)
        if risen.sum() == 2:
            break
    distance = s[shift]
    assert 2.446 < distance < 4.0  # longer than one pulse stays above half its peak
    x, widths = 0.02, 200_000.0
    counts = expose(
        comparator.CR_RC, x, np.array([60.0, 60.0]), [30.0],
        exposures=800, widths=widths, seed=7,
    )  # fmt: skip
    error = counts.std() / 800**0.5 / (x * widths)
    loss = 1.0 - counts.mean() / (x * widths)
    # three pulses in a row change the loss by some (x distance)^2 / 2 at most
    assert loss == pytest.approx(1.0 - math.exp(-distance * x), abs=4 * error + 2e-3)
