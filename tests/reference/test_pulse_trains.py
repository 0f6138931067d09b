"""Dead time and dispersion against pulse trains counted one pulse at a time.

The counter here is a rule, not a formula: a pulse is recorded if none came within the
dead time before it. The formulas of the check are paralysable-counter results
(Yu & Fessler 2000, Phys. Med. Biol. 45, 2043; Knoll, Radiation Detection and
Measurement, ch. 4; both from memory), which this rule must reproduce.
"""

from __future__ import annotations

import numpy as np
import pytest

from spectral.scans.counting_loss import counting_loss
from spectral.scans.dispersion import dispersions, expected_ratio
from spectral.scans.scan import CountsInMemory, Scan

DEAD_TIME_NS = 250.0
TIME_S = 2e-3
RATE_PER_MA = 2e5
CURRENTS = (4.0, 4.0, 4.0, 4.0, 1.0, 1.0)
HIGHER_SHARE = 0.4


def recorded(
    rng: np.random.Generator, rate: float, pixels: int
) -> np.ndarray[tuple[int, int], np.dtype[np.uint32]]:
    """Counts above two thresholds, shape (2, pixel), pulse by pulse.

    The upper threshold takes each recorded pulse with a fixed chance.
    """
    most = int(rate * TIME_S + 8 * np.sqrt(rate * TIME_S)) + 20
    gap = rng.exponential(1.0 / rate, (pixels, most))
    arrival = np.cumsum(gap, axis=1)
    counted = (gap > DEAD_TIME_NS * 1e-9) & (arrival < TIME_S)
    lower = counted.sum(axis=1)
    return np.stack([lower, rng.binomial(lower, HIGHER_SHARE)]).astype(np.uint32)


@pytest.fixture(scope="module")
def scan() -> Scan:
    rng = np.random.default_rng(12)
    counts = np.stack([recorded(rng, RATE_PER_MA * c, 1600) for c in CURRENTS])
    n = len(CURRENTS)
    return Scan(
        counts=CountsInMemory(counts.reshape(n, 2, 40, 40)),
        thresholds_kev=np.array([20.0, 40.0]),
        role=("open",) * n,
        thickness_mm=np.zeros((n, 0)),
        materials=(),
        count_time_s=np.full(n, TIME_S),
        current_ma=np.array(CURRENTS),
        voltage_kv=80.0,
        pixel_mask=np.zeros((40, 40), np.uint32),
    )


@pytest.mark.reference
def test_the_dead_time_comes_back(scan: Scan) -> None:
    loss = counting_loss(scan, np.ones((40, 40), bool))
    assert loss is not None
    assert abs(loss.median_ns - DEAD_TIME_NS) < 4 * loss.standard_error_ns
    assert loss.standard_error_ns < 0.05 * DEAD_TIME_NS
    x = RATE_PER_MA * 4.0 * DEAD_TIME_NS * 1e-9
    assert loss.loss == pytest.approx(1 - np.exp(-x), abs=0.01)


@pytest.mark.reference
def test_the_dispersion_follows_the_dead_time(scan: Scan) -> None:
    for one in dispersions(scan, np.ones((40, 40), bool), dead_time_ns=DEAD_TIME_NS):
        assert np.all(np.abs(one.ratio - one.expected) < 4 * one.standard_error)
    bright = dispersions(scan, np.ones((40, 40), bool), dead_time_ns=DEAD_TIME_NS)[0]
    # x = 0.2: the Poisson value 1 is far away
    assert bright.expected[0] == pytest.approx(1 - 2 * 0.2 * np.exp(-0.2), abs=0.002)
    assert 1 - bright.ratio[0] > 6 * bright.standard_error[0]


@pytest.mark.reference
def test_the_variance_over_mean_of_many_trains() -> None:
    counts = recorded(np.random.default_rng(3), RATE_PER_MA * 4.0, 8000)
    mean = counts.mean(axis=1)
    ratio = counts.var(axis=1, ddof=1) / mean
    # the relative standard error of a variance from 8000 numbers is 1.6 %
    assert np.allclose(ratio, expected_ratio(mean, TIME_S, DEAD_TIME_NS), rtol=0.06)
