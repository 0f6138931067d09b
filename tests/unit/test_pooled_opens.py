"""Many open exposures become a few, with nothing lost of their counts."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.refresh import updated_by_opens
from spectral.scans.bad_pixels import exposures_to_look_at, find_bad_pixels
from spectral.scans.pooled_opens import FEWEST, pooled_opens
from spectral.scans.scan import CountsInMemory

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan


def test_few_opens_stay_as_they_are(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(opens=4)
    assert pooled_opens(scan) is scan
    assert pooled_opens(scan, most_bytes=0) is scan


def test_neighbours_of_one_setting_are_added_up(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(opens=24, pixels=(6, 8), objects=2)
    found = pooled_opens(scan, most_bytes=8 * 4 * 48 * 6)
    assert set(found.role) == {"open"}
    assert FEWEST <= found.shape[0] <= 8
    assert found.current_ma is not None
    assert scan.current_ma is not None
    opens = scan.exposures("open")
    every = np.arange(found.shape[0])
    # all counts and all of the time are still there, for each current
    counts, single = found.counts.read(every), scan.counts.read(opens)
    for current in (3.0, 1.5):
        of, was = found.current_ma == current, scan.current_ma[opens] == current
        assert was.any()
        np.testing.assert_array_equal(counts[of].sum(axis=0), single[was].sum(axis=0))
        assert found.count_time_s[of].sum() == pytest.approx(
            scan.count_time_s[opens][was].sum()
        )


def test_counts_beyond_32_bits_stay_at_the_limit(
    make_scan: Callable[..., Scan],
) -> None:
    scan = make_scan(opens=8, pixels=(2, 3))
    counts = scan.counts.read(np.arange(scan.shape[0])).copy()
    counts[:, :, 1, 1] = 2**32 - 1
    found = pooled_opens(scan.with_counts(counts), most_bytes=0)
    assert np.all(found.counts.read([0])[0, :, 1, 1] == 2**32 - 1)


def test_pixels_follow_sums_as_they_follow_single_opens(
    make_calibration: Callable[..., Calibration],
    make_series: Callable[..., Scan],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    calibration = make_calibration((12, 16))
    # twelve opens: those of three short series of one beam
    parts = [make_series(calibration, 1, seed=s, drift=0.0) for s in (3, 4, 5)]
    counts = np.concatenate([p.counts.read(p.exposures("open")) for p in parts])
    n = len(counts)
    scan = replace(
        parts[0],
        counts=CountsInMemory(counts),
        role=("open",) * n,
        thickness_mm=np.zeros((n, 2)),
        count_time_s=np.full(n, 0.1),
        current_ma=np.full(n, 3.0),
    )
    single = updated_by_opens(calibration, scan)
    monkeypatch.setattr(
        "spectral.calibration.refresh.pooled_opens",
        lambda s: pooled_opens(s, most_bytes=0),
    )
    summed = updated_by_opens(calibration, scan)
    sd = np.sqrt(np.diagonal(single.departure_covariance, axis1=2, axis2=3))
    # the same counts tell the same but for what opens among themselves say of drift
    assert np.abs((summed.departures - single.departures) / sd).max() < 0.2
    moved = np.abs((single.departures - calibration.departures) / sd).max()
    assert moved > 0.5


def test_bad_pixels_are_looked_for_in_so_many_bytes(
    make_scan: Callable[..., Scan],
) -> None:
    scan = make_scan(opens=24, pixels=(6, 8))
    every = exposures_to_look_at(scan)
    assert every.size == scan.shape[0]
    few = exposures_to_look_at(scan, 12 * 4 * 4 * 48)
    assert few.size == 12
    assert (few[0], few[-1]) == (every[0], every[-1])
    reasons = find_bad_pixels(scan, most_bytes=12 * 4 * 4 * 48)
    np.testing.assert_array_equal(reasons, 0)
