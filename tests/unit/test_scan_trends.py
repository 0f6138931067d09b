"""Slow changes within a wedge scan, planted into a made-up calibration."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.scan_trends import output_changes, threshold_trend, trends
from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

ERROR = 1e-3


def scan_with(
    calibration: Calibration,
    *,
    seed: int = 1,
    shift_kev: float = 0.0,
    output: NDArray[np.float64] | float = 0.0,
) -> Calibration:
    """Exposures in a mixed order; the thresholds move evenly by ``shift_kev``."""
    rng = np.random.default_rng(seed)
    steps = calibration.steps
    count, bins = steps.error.shape
    place = np.random.default_rng(9).permutation(count)
    order = np.argsort(place)
    rate = calibration.photons_per_mas * steps.current_ma
    tables = curve_tables(calibration.model, steps.areal_density, rate)
    average = PixelDepartures(values=np.zeros((1, bins + 3)))

    def logs(shift: float) -> NDArray[np.float64]:
        above, _ = expected_above(tables, calibration.levels_kev + shift, average)
        return np.asarray(np.log(counts_to_bins(above[0])))

    total = rng.normal(0.0, ERROR, (count, bins)) + rng.normal(0.0, 5e-4, (count, 1))
    total += (np.broadcast_to(output, count)[place])[:, None]
    for e in range(count):
        share = place[e] / (count - 1) - 0.5
        total[e] += (logs(shift_kev * share) - logs(0.0))[e]
    table = replace(
        steps,
        exposure=place[order],
        areal_density=steps.areal_density[order],
        residual=np.expm1(total)[order],
        physics_residual=np.expm1(total)[order],
        error=np.full((count, bins), ERROR),
    )
    return replace(calibration, steps=table)


@pytest.fixture
def made(make_calibration: Callable[[], Calibration]) -> Calibration:
    return make_calibration()


@pytest.mark.parametrize("shift", [-0.4, 0.25])
def test_moving_thresholds_are_found(made: Calibration, shift: float) -> None:
    change, error = threshold_trend(scan_with(made, shift_kev=shift))
    assert abs(change - shift) < 4.0 * error
    assert error < 0.06


def test_moving_thresholds_are_told_of(made: Calibration) -> None:
    said = trends(scan_with(made, shift_kev=-0.4))
    found = re.search(r"thresholds moved by (-[\d.]+) \+- [\d.]+ keV", said[0])
    assert found is not None
    assert float(found[1]) == pytest.approx(-0.4, abs=0.15)
    assert "the calibration holds for their mean" in said[0]


def test_steady_scans_are_not_told_of(made: Calibration) -> None:
    assert all(trends(scan_with(made, seed=seed)) == () for seed in range(20))


def test_stated_error_of_the_change_is_that_of_its_scatter(made: Calibration) -> None:
    pulls = []
    for seed in range(60):
        change, error = threshold_trend(scan_with(made, seed=seed))
        pulls.append(change / error)
    # 60 draws: mean known to 0.13, standard deviation to a tenth
    assert abs(np.mean(pulls)) < 0.5
    assert 0.5 < np.std(pulls) < 1.3


def test_warm_up_is_told_of_and_no_threshold_blamed(made: Calibration) -> None:
    late = np.log1p(-0.05 * np.exp(-np.arange(16) / 5.0))
    (said,) = trends(scan_with(made, output=late))
    found = re.search(r"output changed by \+([\d.]+) %", said)
    assert found is not None
    wanted = 100 * np.expm1(late[-3:].mean() - late[:3].mean())
    assert float(found[1]) == pytest.approx(wanted, abs=0.3)


def test_output_is_what_all_bins_share(made: Calibration) -> None:
    course = np.linspace(-0.02, 0.02, 16)
    found = output_changes(scan_with(made, output=course))
    np.testing.assert_allclose(found, course, atol=4e-3)
