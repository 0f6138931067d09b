"""A virtual detector whose thresholds drift: a short scan brings its calibration back.

One long list of exposures gives a wedge scan, and after a drift of all thresholds a
short scan and a part. The detector shares neither sensor model nor pulse shape with the
calibration.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, replace
from importlib.metadata import entry_points
from typing import TYPE_CHECKING

import click
import numpy as np
import pytest
from click.testing import CliRunner

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.calibrator import WedgeCalibrator
from spectral.calibration.refresh import Refreshed, refresh, updated_by_opens
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan
from spectral.scans.scan_writing import write_scan
from spectral.virtual.detector import PixelSpread, VirtualDetector, VirtualSensor
from spectral.virtual.tube import VirtualTube
from spectral.virtual.virtual_scan import simulate_scan

if TYPE_CHECKING:
    from pathlib import Path

    from click.testing import Result
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

pytestmark = [pytest.mark.end_to_end, pytest.mark.slow]

SIDE = 10
DRIFT_KEV = 0.3
REPEATS = 5
DETECTOR = VirtualDetector(
    name="invented for this test",
    sensor=VirtualSensor(
        material="CdTe",
        density_g_cm3=5.85,
        thickness_um=1000.0,
        pitch_um=100.0,
        bias_v=600.0,
        pair_energy_ev=4.43,
        fano=0.1,
        relative_permittivity=10.9,
    ),
    thresholds_kev=(20.0, 32.0, 45.0, 58.0),
    noise_kev=1.8,
    dead_time_ns=90.0,
    pulse_shape="semi-gaussian",
    spread=PixelSpread(threshold_kev=0.5, gain=0.01, area=0.02, dead_time=0.04),
)
MATERIALS = (
    Layer(name="PMMA", formula="C5H8O2", density_g_cm3=1.19),
    Layer(name="Al", formula="Al", density_g_cm3=2.70),
)
WEDGE_MM = (
    (15.0, 0.0), (40.0, 4.0), (0.0, 2.0), (60.0, 0.0), (15.0, 8.0), (0.0, 8.0),
    (40.0, 0.0), (0.0, 4.0), (15.0, 2.0), (60.0, 2.0),
)  # fmt: skip
SHORT_MM = ((15.0, 2.0), (40.0, 4.0), (0.0, 8.0))
OBJECT_MM = (25.0, 3.0)


@dataclass(frozen=True, kw_only=True)
class Sessions:
    """The scans, and what is true of them."""

    wedge: Scan
    short: Scan
    part: Scan
    truth: NDArray[np.float64]


def template() -> tuple[Scan, list[int]]:
    """All exposures in one list, and the first of each session."""
    role: list[str] = []
    thickness: list[tuple[float, float]] = []
    time: list[float] = []
    first = []
    unknown = (np.nan, np.nan)

    def add(what: str, seconds: float, *stacks: tuple[float, float]) -> None:
        for stack in stacks or ((0.0, 0.0),):
            role.append(what)
            thickness.append(stack)
            time.append(seconds)

    for what, seconds, stacks in (
        ("wedge", 0.25, WEDGE_MM),
        ("wedge", 0.7, SHORT_MM),
        ("object", 0.3, (unknown,) * REPEATS),
    ):
        first.append(len(role))
        add("dark", seconds)
        add("open", seconds)
        add("open", seconds)
        add(what, seconds, *stacks)
        add("open", seconds)
    current = np.where(np.array(role) == "dark", 0.0, 4.0)
    current[2] = 2.0
    scan = Scan(
        counts=CountsInMemory(np.zeros((len(role), 4, SIDE, SIDE), np.uint32)),
        thresholds_kev=np.array(DETECTOR.thresholds_kev),
        role=tuple(role),
        thickness_mm=np.array(thickness),
        materials=MATERIALS,
        count_time_s=np.array(time),
        current_ma=current,
        voltage_kv=90.0,
        filters=(Filter(material="Al", thickness_mm=2.0),),
        sensor_material="CdTe",
        sensor_thickness_mm=1.0,
        pixel_size_um=(100.0, 100.0),
        pixel_mask=np.zeros((SIDE, SIDE), np.uint32),
    )
    return scan, first


def part(scan: Scan, exposures: range) -> Scan:
    """Some exposures of a scan as a scan of their own."""
    which = np.array(exposures)
    assert scan.current_ma is not None
    return replace(
        scan,
        counts=CountsInMemory(scan.counts.read(which)),
        role=tuple(scan.role[i] for i in exposures),
        thickness_mm=scan.thickness_mm[which],
        count_time_s=scan.count_time_s[which],
        current_ma=scan.current_ma[which],
    )


@pytest.fixture(scope="module")
def sessions() -> Sessions:
    scan, first = template()
    n = len(scan.role)
    density = np.array([m.density_g_cm3 for m in MATERIALS])
    truth = np.array(OBJECT_MM) * 0.1 * density
    run = simulate_scan(
        scan,
        DETECTOR,
        VirtualTube(photons_per_mas=15_000.0, drift_step=5e-4),
        seed=11,
        object_areal_density=np.tile(truth[:, None, None], (1, SIDE, SIDE)),
        threshold_drift_kev=np.where(np.arange(n) < first[1], 0.0, DRIFT_KEV),
    ).scan
    return Sessions(
        wedge=part(run, range(first[1])),
        short=part(run, range(first[1], first[2])),
        part=part(run, range(first[2], n)),
        truth=truth,
    )


@pytest.fixture(scope="module")
def old(sessions: Sessions) -> Calibration:
    fitted = WedgeCalibrator(rounds=5, samples=512, leave_out=False).fit(sessions.wedge)
    return fitted.calibration_


@pytest.fixture(scope="module")
def refreshed(sessions: Sessions, old: Calibration) -> Refreshed:
    return refresh(old, sessions.short)


def bias(calibration: Calibration, sessions: Sessions) -> NDArray[np.float64]:
    """Mean of the maps less the truth, over the error of one pixel in one exposure."""
    maps = MaterialDecomposer(calibration).decompose(sessions.part)
    good = (maps.flags == 0)[:, None]
    pull = (maps.areal_density - sessions.truth[:, None, None]) / (
        maps.areal_density_errors
    )
    return np.asarray(np.nanmean(np.where(good, pull, np.nan), axis=(0, 2, 3)))


def test_planted_drift_is_found_within_its_error(refreshed: Refreshed) -> None:
    common = refreshed.common
    pull = (common.shift_kev - DRIFT_KEV) / common.shift_error_kev
    assert np.abs(pull).max() < 3.0
    # the highest threshold is told best from the tube's output
    assert common.shift_error_kev[-1] < 0.15
    assert common.shift_chance < 1e-6
    # all pixels drifted alike
    assert refreshed.pixels.spread[1] < 0.1
    assert not refreshed.full_scan_needed, refreshed.reasons


def test_bias_of_the_maps_is_gone(
    refreshed: Refreshed, old: Calibration, sessions: Sessions
) -> None:
    before, after = bias(old, sessions), bias(refreshed.calibration, sessions)
    # some 600 estimates of each material: 0.04
    assert np.abs(before).max() > 0.18
    assert np.abs(after).max() < 0.5 * np.abs(before).max()
    assert np.abs(after).max() < 0.2


def test_opens_of_the_part_make_its_pixels_better_known(
    refreshed: Refreshed, sessions: Sessions
) -> None:
    better = updated_by_opens(refreshed.calibration, sessions.part)
    before, after = (
        np.trace(c.departure_covariance[c.good].mean(axis=0)[1:5, 1:5])
        for c in (refreshed.calibration, better)
    )
    assert after < before
    assert np.abs(bias(better, sessions)).max() < 0.2


def run(*words: object) -> Result:
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    command = script.load()
    assert isinstance(command, click.Group)
    return CliRunner().invoke(command, [str(word) for word in words])


def test_commands_refresh_and_compare(
    old: Calibration, refreshed: Refreshed, sessions: Sessions, tmp_path: Path
) -> None:
    first, short, second = (
        tmp_path / name for name in ("old.h5", "short.h5", "new.h5")
    )
    write_calibration(old, first)
    write_scan(sessions.short, short)
    done = run("refresh", first, short, "-o", second, "--json")
    assert done.exit_code == 0, done.output
    found = json.loads(done.stdout)
    assert found["full_scan_needed"] is False
    np.testing.assert_allclose(
        found["threshold_shift_kev"], refreshed.common.shift_kev, atol=2e-3
    )
    new = read_calibration(second)
    assert read_calibration(first).digest in new.findings[-1]
    page = tmp_path / "page.html"
    compared = run("compare", first, second, "-o", page)
    assert compared.exit_code == 0, compared.output
    assert "The thresholds moved on average" in compared.stdout
    assert f"page: {page}" in compared.stdout
    assert "from old.h5 to new.h5" in page.read_text(encoding="utf-8")
    figures = json.loads(run("compare", first, second, "--json").stdout)
    # the same movement, told from what both calibrations expect: no counts are new,
    # so that the two agree to a part of the error
    left = np.subtract(figures["threshold_change_kev"], found["threshold_shift_kev"])
    assert np.all(np.abs(left) < 0.5 * refreshed.common.shift_error_kev)


def test_commands_say_in_one_sentence_what_does_not_go(
    old: Calibration, sessions: Sessions, tmp_path: Path
) -> None:
    first, short = tmp_path / "old.h5", tmp_path / "short.h5"
    write_calibration(old, first)
    write_scan(replace(sessions.short, voltage_kv=80.0), short)
    refused = run("refresh", first, short, "-o", tmp_path / "new.h5")
    assert refused.exit_code == 1
    assert "was taken at 80 kV and not at 90 kV" in refused.stderr
    assert not (tmp_path / "new.h5").exists()
    other = tmp_path / "other.h5"
    write_calibration(replace(old, voltage_kv=80.0), other)
    unlike = run("compare", first, other)
    assert unlike.exit_code == 1
    assert "compare calibrations of one setting" in unlike.stderr
