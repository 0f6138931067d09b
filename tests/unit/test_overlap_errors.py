"""Errors of maps wider by what overlapping pulses add to the scatter."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.decomposition.conditions import ConditionsStore
from spectral.decomposition.decomposer import MaterialDecomposer

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

EXCESS = 3.0


def test_variance_rises_with_the_rate_behind_the_object(
    make_calibration: Callable[..., Calibration],
    make_series: Callable[..., Scan],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    calibration = make_calibration((6, 8))
    scan = make_series(calibration, 2)
    found = []
    for excess in (0.0, EXCESS):
        monkeypatch.setattr(ConditionsStore, "excess", lambda *_, e=excess: e)
        found.append(MaterialDecomposer(calibration).decompose(scan))
    plain, widened = found
    chosen = scan.exposures("object")
    above = scan.counts.read(chosen)[:, 0].astype(np.float64)
    x = above / scan.count_time_s[chosen, None, None] * calibration.dead_time_ns * 1e-9
    rise = (widened.areal_density_errors / plain.areal_density_errors) ** 2 - 1.0
    good = np.broadcast_to(plain.flags[:, None] == 0, rise.shape)
    assert good.mean() > 0.9
    # the expected counts are meant; the counted ones scatter about them by a root
    error = EXCESS * x / np.sqrt(above)
    departure = np.abs(rise - EXCESS * x[:, None]) / error[:, None]
    assert departure[good].max() < 5.0
    assert rise[good].max() > 1.5 * rise[good].min() > 0.0
    np.testing.assert_array_equal(widened.areal_density, plain.areal_density)
    np.testing.assert_array_equal(widened.calibration_errors, plain.calibration_errors)


def test_excess_of_a_calibration_is_found_once_for_like_currents(
    make_calibration: Callable[..., Calibration], monkeypatch: pytest.MonkeyPatch
) -> None:
    rates: list[float] = []

    def noted(*given: object) -> float:
        rates.append(float(given[-1]))  # type: ignore[arg-type]
        return 1.0

    monkeypatch.setattr("spectral.decomposition.conditions.overlap_excess", noted)
    calibration = make_calibration()
    store = ConditionsStore(calibration)
    for current in (3.3, 3.301, 3.4, 0.5, 3.3):
        assert store.excess(current) == 1.0
    assert len(rates) == 2
    assert rates == pytest.approx(
        [calibration.photons_per_mas * 3.3, calibration.photons_per_mas * 0.5], rel=0.11
    )
