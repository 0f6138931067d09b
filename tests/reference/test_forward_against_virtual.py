"""The forward model against a detector that counts event by event.

The virtual detector shares no physics with the forward model but cross sections and the
tube's spectrum: it is an independent computation. DEVELOPERS.md holds the whole table;
here one sensor is compared, on few pixels.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from spectral.calibration.calibrator import WedgeCalibrator

if TYPE_CHECKING:
    from collections.abc import Callable
    from types import ModuleType

PIXELS = 12

pytestmark = [pytest.mark.reference, pytest.mark.slow]


@pytest.fixture(scope="module")
def silicon(
    load_benchmark: Callable[[str], ModuleType],
) -> tuple[Any, Any, ModuleType]:
    table = load_benchmark("witness_table")
    (bench,) = (b for b in table.BENCHES if b.detector == "silicon")
    instrument = table.Instrument.build(bench, pixels=PIXELS)
    scan = instrument.wedge_scan().scan
    fitted = WedgeCalibrator(leave_out=False).fit(scan)
    return instrument, fitted.calibration_, table


def test_expected_counts_are_those_of_the_witness(
    silicon: tuple[Any, Any, ModuleType],
) -> None:
    instrument, calibration, table = silicon
    rows = table.witness_rows(instrument, calibration, counts=4.0)
    assert len(rows) == 9
    after = np.array([r.after for r in rows])
    error = np.array([r.error for r in rows])
    before = np.array([r.before for r in rows])
    full = np.array([r.current_ma for r in rows]) == 4.0
    # the wedge scan's own error of a bin: as large as the witness's
    allowed = 4.0 * np.sqrt(2.0) * error
    assert np.all(np.abs(after[full]) < 0.7 + allowed[full])
    assert np.sqrt(np.mean(after[full] ** 2)) < 0.7
    # at rates where no stack was measured pile-up itself must be right
    assert np.all(np.abs(after[~full]) < 0.7 + allowed[~full])
    assert np.sqrt(np.mean(after**2)) < 0.08 * np.sqrt(np.mean(before**2))


def test_the_chain_is_unbiased_and_says_its_errors(
    silicon: tuple[Any, Any, ModuleType],
) -> None:
    instrument, calibration, table = silicon
    for row in table.chain_rows(instrument, calibration, repeats=8):
        assert row.largest_bias < 0.35
        assert row.repeat_ratio == pytest.approx(1.0, abs=0.12)
        assert 0.9 < row.rmse_over_bound < 1.2
        assert row.flagged < 0.05


def test_an_error_of_the_model_would_show(
    silicon: tuple[Any, Any, ModuleType],
) -> None:
    instrument, calibration, table = silicon
    one = table.witness_rows(instrument, calibration, counts=1.0)
    shifted = table.replace(calibration, levels_kev=calibration.levels_kev + 0.5)
    other = table.witness_rows(instrument, shifted, counts=1.0)
    worst = [max(abs(v) for r in rows for v in r.after) for rows in (one, other)]
    assert worst[1] > 2.0 * worst[0]
