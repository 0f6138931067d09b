"""What a calibration reads of a wedge scan, and which scans it refuses."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.wedge_data import wedge_data
from spectral.errors import CalibrationError

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.scans.scan import Scan

SHAPE = (4, 5)


@pytest.fixture
def scan(make_scan: Callable[..., Scan]) -> Scan:
    """2 dark, 2 open, 11 wedge, 2 open and 1 object exposures."""
    return make_scan(pixels=SHAPE, objects=1)


def none_bad() -> np.ndarray:
    return np.zeros(SHAPE, bool)


def test_opens_and_steps_are_read_and_darks_and_objects_left(scan: Scan) -> None:
    data = wedge_data(scan, none_bad())
    assert data.exposure.tolist() == list(range(2, 17))
    assert data.is_open.tolist() == [True] * 2 + [False] * 11 + [True] * 2
    assert data.above.shape == (20, 15, 4)
    assert data.shape == SHAPE
    # 10 mm of PMMA of 1.19 g/cm3 and 1 mm of Al of 2.7 g/cm3
    assert any(np.allclose(a, [1.19, 0.27]) for a in data.areal_density)
    np.testing.assert_array_equal(data.current_ma, scan.current_ma[2:17])  # type: ignore[index]
    np.testing.assert_array_equal(data.count_time_s, 0.5)


def test_counts_stand_pixel_by_pixel(scan: Scan) -> None:
    bad = none_bad()
    bad[0, 1] = bad[3, 4] = True
    data = wedge_data(scan, bad)
    assert data.pixel.tolist() == [0, *range(2, 19)]
    counts = scan.counts.read([5])[0]
    np.testing.assert_array_equal(data.above[4, 3], counts[:, 1, 0])
    bins = counts[:, 1, 0].astype(float)
    bins[:-1] -= bins[1:]
    np.testing.assert_array_equal(data.bins[4, 3], bins)


def test_excluded_exposures_are_not_read(scan: Scan) -> None:
    data = wedge_data(scan, none_bad(), excluded=(2, 7))
    assert 2 not in data.exposure
    assert 7 not in data.exposure
    later = wedge_data(scan, none_bad()).without(np.array([2, 7]))
    np.testing.assert_array_equal(later.exposure, data.exposure)
    np.testing.assert_array_equal(later.above, data.above)
    np.testing.assert_array_equal(later.areal_density, data.areal_density)
    np.testing.assert_array_equal(later.current_ma, data.current_ma)


def test_current_is_one_where_the_scan_says_none(scan: Scan) -> None:
    data = wedge_data(replace(scan, current_ma=None), none_bad())
    np.testing.assert_array_equal(data.current_ma, 1.0)


def with_steps(scan: Scan, change: Callable[[np.ndarray], None]) -> Scan:
    thickness = scan.thickness_mm.copy()
    change(thickness)
    return replace(scan, thickness_mm=thickness)


def test_scan_without_open_is_refused(scan: Scan) -> None:
    role = tuple("object" if r == "open" else r for r in scan.role)
    with pytest.raises(CalibrationError, match="no open exposure; add at least one"):
        wedge_data(replace(scan, role=role), none_bad())


def test_too_few_stacks_are_refused(scan: Scan) -> None:
    def all_alike(thickness: np.ndarray) -> None:
        thickness[4:15] = [10.0, 1.0]

    with pytest.raises(
        CalibrationError, match=r"2 different stacks, at least 6 are needed for 2 mat"
    ):
        wedge_data(with_steps(scan, all_alike), none_bad())


def test_a_material_that_never_stands_in_the_beam_is_refused(scan: Scan) -> None:
    def no_aluminium(thickness: np.ndarray) -> None:
        thickness[4:15, 1] = 0.0
        thickness[4:15, 0] = np.arange(1.0, 12.0)

    with pytest.raises(CalibrationError, match="no wedge step holds Al; add some"):
        wedge_data(with_steps(scan, no_aluminium), none_bad())


def test_no_good_pixel_is_refused(scan: Scan) -> None:
    with pytest.raises(CalibrationError, match="no good pixel is left"):
        wedge_data(scan, ~none_bad())
