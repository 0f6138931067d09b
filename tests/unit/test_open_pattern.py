"""Opens of another detector are told from those of one that drifted."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.open_pattern import open_pattern
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.summary import maps_summary, maps_text

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan
    from tests.conftest import MakeCalibration, MakeSeries

SHAPE = (12, 20)
SAID = "pattern over the pixels is not this calibration's"


@pytest.fixture(scope="module")
def calibration(make_calibration: MakeCalibration) -> Calibration:
    return make_calibration(SHAPE)


def drifted(calibration: Calibration, seed: int) -> Calibration:
    """Thresholds 0.3 keV up, each 0.1 keV by itself; 1 % more flux, 0.3 % of areas."""
    rng = np.random.default_rng(seed)
    departures = calibration.departures.copy()
    departures[..., 1:-2] += rng.normal(0.0, 0.1, departures[..., 1:-2].shape)
    departures[..., 0] += rng.normal(0.0, 3e-3, SHAPE)
    return replace(
        calibration,
        departures=departures,
        levels_kev=calibration.levels_kev + 0.3,
        photons_per_mas=1.01 * calibration.photons_per_mas,
    )


def another(calibration: Calibration, seed: int) -> Calibration:
    """Pixels of the same spreads that have nothing to do with the calibration's."""
    mixed = calibration.departures.reshape(-1, calibration.departures.shape[-1])
    mixed = np.random.default_rng(seed).permutation(mixed)
    return replace(calibration, departures=mixed.reshape(calibration.departures.shape))


@pytest.mark.parametrize("count_time_s", [0.005, 0.1])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_drift_is_let_through_and_other_pixels_are_not(
    calibration: Calibration, make_series: MakeSeries, seed: int, count_time_s: float
) -> None:
    usable = np.ones(SHAPE, bool)
    for made, share in (
        (calibration, 1.0),
        (drifted(calibration, seed), 1.0),
        (another(calibration, seed), 0.0),
    ):
        scan = make_series(made, 1, seed=seed, count_time_s=count_time_s)
        found = open_pattern(calibration, scan, usable)
        assert found is not None
        assert found.share == pytest.approx(share, abs=max(0.1, 4.0 * found.error))
        assert found.error < 0.1
        assert found.is_other is (share == 0.0)
        assert (SAID in found.note) is (share == 0.0)


def test_what_a_wedge_scan_told_little_of_is_let_through(
    calibration: Calibration, make_series: MakeSeries
) -> None:
    """Departures drawn to 0, as posterior means are: the truth scatters about them."""
    share = 0.2
    rng = np.random.default_rng(5)
    told = share * calibration.departures
    left = np.sqrt(share * (1.0 - share)) * calibration.departures.std(axis=(0, 1))
    truth = told + rng.normal(0.0, 1.0, told.shape) * left
    scan = make_series(replace(calibration, departures=truth), 1)
    found = open_pattern(
        replace(calibration, departures=told), scan, np.ones(SHAPE, bool)
    )
    assert found is not None
    assert found.share == pytest.approx(1.0, abs=4.0 * found.error)
    assert not found.is_other


def test_a_beam_that_slopes_is_no_other_detector(
    calibration: Calibration, make_series: MakeSeries
) -> None:
    scan = make_series(calibration, 1)
    slope = 1.0 + 0.2 * np.linspace(-1.0, 1.0, SHAPE[1])
    counts = np.rint(scan.counts.read(range(scan.shape[0])) * slope).astype(np.uint32)
    found = open_pattern(calibration, scan.with_counts(counts), np.ones(SHAPE, bool))
    assert found is not None
    assert found.share == pytest.approx(1.0, abs=0.1)


def test_what_tells_nothing(
    calibration: Calibration, make_series: Callable[..., Scan]
) -> None:
    usable = np.zeros(SHAPE, bool)
    usable[0, :5] = True
    scan = make_series(calibration, 1)
    assert open_pattern(calibration, scan, usable) is None
    objects = replace(scan, role=("object",) * scan.shape[0])
    everything = np.ones(SHAPE, bool)
    assert open_pattern(calibration, objects, everything) is None
    dark = scan.with_counts(np.zeros(scan.shape, np.uint32))
    assert open_pattern(calibration, dark, everything) is None
    alike = replace(calibration, departures=np.zeros_like(calibration.departures))
    assert open_pattern(alike, scan, everything) is None


@pytest.mark.parametrize("follow", [True, False])
def test_maps_by_another_detectors_calibration_say_so(
    calibration: Calibration, make_series: MakeSeries, follow: bool
) -> None:
    decomposer = MaterialDecomposer(calibration, follow_pixels=follow)
    wrong = decomposer.decompose(make_series(another(calibration, 1), 1))
    assert SAID in json.dumps(maps_summary(wrong))
    assert f"note: the open exposures' {SAID}" in maps_text(wrong)
    right = decomposer.decompose(make_series(drifted(calibration, 1), 1))
    assert SAID not in maps_text(right)
    untold = decomposer.decompose(replace(make_series(calibration, 1), current_ma=None))
    assert SAID not in maps_text(untold)
