"""Thicknesses in a wrong unit show in the steps' attenuation."""

from __future__ import annotations

from dataclasses import replace
from importlib.metadata import entry_points
from typing import TYPE_CHECKING

import numpy as np
import pytest
from click.testing import CliRunner

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.errors import CalibrationError
from spectral.forward.step_thickness import thickness_faults, wedge_faults
from spectral.physics.cross_sections import mass_attenuation
from spectral.reporting.scan_page import scan_page
from spectral.scans.scan_file import write_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.scans.scan import Scan


@pytest.fixture
def scan(make_scan: Callable[..., Scan]) -> Scan:
    return make_scan(pixels=(6, 8))


def stretched(scan: Scan, factor: float) -> Scan:
    return replace(scan, thickness_mm=factor * scan.thickness_mm)


@pytest.mark.parametrize(
    ("factor", "words"),
    [(0.1, "10 times thicker"), (10.0, "10 times thinner"), (1 / 25.4, r"2\d times")],
)
def test_a_wrong_unit_is_told(scan: Scan, factor: float, words: str) -> None:
    wrong = stretched(scan, factor)
    (fault,) = wedge_faults(wrong)
    assert fault.startswith("all steps attenuate as if they were ")
    assert "are the thicknesses in mm" in fault
    with pytest.raises(CalibrationError, match=f"^{scan.source}: all steps .*{words}"):
        WedgeCalibrator().fit(wrong)
    assert any("are the thicknesses in mm" in text for text in scan_page(wrong).look)


@pytest.mark.parametrize("loss", [0.0, 0.3])
@pytest.mark.parametrize("factor", [0.6, 1.0, 1.6])
def test_what_lost_pulses_and_wrong_densities_do_is_let_through(
    make_scan: Callable[..., Scan], loss: float, factor: float
) -> None:
    made = make_scan(pixels=(6, 8), loss=loss, opens=6)
    assert wedge_faults(stretched(made, factor)) == ()


def test_one_wrong_step_is_not_all(scan: Scan) -> None:
    thickness = scan.thickness_mm.copy()
    thickness[8] *= 0.1
    assert thickness_faults(replace(scan, thickness_mm=thickness)) == ()


def test_steps_and_opens_that_tell_nothing(scan: Scan) -> None:
    wrong = stretched(scan, 0.1)
    opens = [i for i, role in enumerate(scan.role) if role == "open"]
    assert thickness_faults(wrong, without=opens) == ()
    same = wrong.with_counts(np.full(scan.shape, 1000, np.uint32))
    assert thickness_faults(same) == ()
    dark = wrong.with_counts(np.zeros(scan.shape, np.uint32))
    assert thickness_faults(dark) == ()
    bare = replace(scan, sensor_material=None)
    assert "sensor_material" in wedge_faults(bare)[0]


def test_nothing_attenuates_far_beyond_its_cross_section(scan: Scan) -> None:
    """A narrow beam's effective coefficient lies between those at its two ends.

    Common practice, no source.
    """
    narrow = replace(scan, thresholds_kev=np.array([60.0, 70.0, 75.0, 80.0]))
    thickness = np.zeros_like(scan.thickness_mm)
    wedge = [i for i, role in enumerate(scan.role) if role == "wedge"]
    thickness[wedge, 1] = 10.0
    counts = np.full(scan.shape, 100_000, np.uint32)
    for end, fits in ((60.0, True), (90.0, True), (15.0, False)):
        mu = mass_attenuation({"Al": 1.0}, np.array([end]))[0]
        counts[wedge] = max(round(100_000 * np.exp(-2.7 * mu)), 6)
        made = replace(narrow.with_counts(counts), thickness_mm=thickness)
        assert (thickness_faults(made) == ()) is fits


def test_check_does_not_call_it_fit(scan: Scan, tmp_path: Path) -> None:
    write_scan(stretched(scan, 0.1), tmp_path / "wedge.h5")
    (entry,) = entry_points(group="console_scripts", name="wedgewright")
    done = CliRunner().invoke(entry.load(), ["check", str(tmp_path / "wedge.h5")])
    assert done.exit_code == 1
    assert "wedge.h5: not fit" in done.stdout
    assert "all steps attenuate as if they were 10 times thicker" in done.stderr
