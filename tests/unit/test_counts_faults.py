"""Counts that cannot be are found, and only those."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.scans.counts_faults import (
    FAULT_MEANING,
    CountFault,
    count_faults,
    scan_count_faults,
)
from spectral.scans.scan import CountsInMemory, Scan
from spectral.scans.stored_counts import NOT_A_COUNT


@pytest.mark.parametrize(
    ("above", "limit", "fault"),
    [
        ((100, 50, 7), NOT_A_COUNT, CountFault.NONE),
        ((0, 0, 0), NOT_A_COUNT, CountFault.NONE),
        ((4095, 50, 7), 4095, CountFault.AT_LIMIT),
        ((4094, 50, 7), 4095, CountFault.NONE),
        ((NOT_A_COUNT, 50, 7), 4095, CountFault.NOT_A_COUNT),
        # 150 - 50 = 100 > 5 sqrt(200) = 70.7
        ((50, 150, 7), NOT_A_COUNT, CountFault.RISING),
        # 100 - 60 = 40 < 5 sqrt(160) = 63.2
        ((60, 100, 7), NOT_A_COUNT, CountFault.NONE),
        # 26 > 5 sqrt(26) = 25.5, 25 = 5 sqrt(25)
        ((100, 0, 26), NOT_A_COUNT, CountFault.RISING),
        ((100, 0, 25), NOT_A_COUNT, CountFault.NONE),
        ((4095, 50, 700), 4095, CountFault.AT_LIMIT | CountFault.RISING),
    ],
)
def test_faults(above: tuple[int, ...], limit: int, fault: CountFault) -> None:
    counts = np.array(above, np.uint32).reshape(1, 3, 1, 1)
    assert count_faults(counts, count_limit=limit)[0, 0, 0] == fault


def test_honest_counts_of_equal_thresholds_are_left_alone() -> None:
    # two comparators at the same energy with independent noise: the hardest case
    rng = np.random.default_rng(3)
    counts = rng.poisson(400.0, (1, 2, 400, 500)).astype(np.uint32)
    assert np.count_nonzero(count_faults(counts)) <= 2


def test_a_scan_is_looked_at_exposure_by_exposure() -> None:
    counts = np.full((3, 2, 2, 2), 10, np.uint32)
    counts[1, 0, 0, 1] = NOT_A_COUNT
    scan = Scan(
        counts=CountsInMemory(counts),
        thresholds_kev=np.array([20.0, 40.0]),
        role=("open",) * 3,
        thickness_mm=np.zeros((3, 0)),
        materials=(),
        count_time_s=np.ones(3),
        voltage_kv=80.0,
        pixel_mask=np.zeros((2, 2), np.uint32),
    )
    faults = scan_count_faults(scan)
    assert np.argwhere(faults).tolist() == [[1, 0, 1]]
    assert scan_count_faults(scan, [2, 1])[1, 0, 1] == CountFault.NOT_A_COUNT


def test_each_fault_has_a_meaning() -> None:
    assert set(FAULT_MEANING) == set(CountFault)
