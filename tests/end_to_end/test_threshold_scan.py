"""Threshold scans of a virtual detector: do the energies come back as they were."""

from __future__ import annotations

import json
from importlib.metadata import entry_points
from typing import TYPE_CHECKING

import click
import numpy as np
import pytest
from click.testing import CliRunner

from spectral.calibration.threshold_scan.calibrate import threshold_energies
from spectral.calibration.threshold_scan.energies_file import read_threshold_energies
from spectral.calibration.threshold_scan.result import (
    ThresholdEnergies,
    threshold_levels,
    threshold_prior,
)
from spectral.scans.threshold_scan import LineSource
from spectral.scans.threshold_scan_file import write_threshold_scan
from spectral.virtual.detector import (
    BadPixelShares,
    PixelSpread,
    VirtualDetector,
    VirtualSensor,
)
from spectral.virtual.pixels import PixelKind
from spectral.virtual.threshold_scan import (
    SettingSpread,
    VirtualThresholdScans,
    simulate_threshold_scans,
)

if TYPE_CHECKING:
    from pathlib import Path

pytestmark = [pytest.mark.end_to_end, pytest.mark.slow]

# A detector of our own. Sensor values as textbooks give them for CdTe (from memory).
DETECTOR = VirtualDetector(
    name="made-up CdTe, 150 um",
    sensor=VirtualSensor(
        material="CdTe",
        density_g_cm3=5.85,
        thickness_um=1000.0,
        pitch_um=150.0,
        bias_v=600.0,
        pair_energy_ev=4.43,
        fano=0.1,
        relative_permittivity=10.9,
        gap_um=4.0,
        gap_loss=0.25,
    ),
    thresholds_kev=(20.0,),
    noise_kev=1.3,
    dead_time_ns=60.0,
    spread=PixelSpread(noise=0.08, area=0.02, dead_time=0.05),
    bad_pixels=BadPixelShares(dead=0.01, stuck=0.01, noisy=0.01, unstable=0.01),
)
SCALE = SettingSpread(
    offset_kev=-4.0, gain_kev=0.25, offset_spread_kev=0.8, gain_spread=0.02
)
SOURCES = (
    LineSource(kind="fluorescence target", emitter="Mo"),
    LineSource(kind="fluorescence target", emitter="Gd"),
    LineSource(kind="radionuclide", emitter="Am-241"),
)
ABOUT_KEV = (17.4, 42.8, 59.5)
PHOTONS = (3500.0, 6000.0, 8000.0)


@pytest.fixture(scope="module")
def virtual() -> VirtualThresholdScans:
    settings = tuple(
        np.round((kev + np.linspace(-8.0, 10.0, 20) - SCALE.offset_kev) / 0.25)
        for kev in ABOUT_KEV
    )
    return simulate_threshold_scans(
        SOURCES,
        settings,
        DETECTOR,
        SCALE,
        (14, 16),
        seed=21,
        photons=PHOTONS,
        photons_per_s=5e4,
        background=0.1,
    )


@pytest.fixture(scope="module")
def found(virtual: VirtualThresholdScans) -> ThresholdEnergies:
    return threshold_energies(virtual.scans)


def test_true_kev_come_back_in_99_of_100_good_pixels(
    virtual: VirtualThresholdScans, found: ThresholdEnergies
) -> None:
    good = virtual.pixels.kind == PixelKind.GOOD
    good_and_usable = good & found.usable[0]
    # 1 % of some 210 pixels may be flagged or beyond
    assert good_and_usable.sum() >= 0.99 * good.sum()
    for kev in (20.0, 35.0, 50.0):
        setting = (kev - SCALE.offset_kev) / SCALE.gain_kev
        energy, error = found.energies([setting])
        off = (energy[0] - virtual.energies_kev(setting))[good]
        within = np.abs(off) < 0.15
        assert within.mean() >= 0.99, kev
        # the errors are what they say: scatter over error near 1 (sd of 4 %, and a
        # prior learned from the same pixels)
        pull = (off - np.median(off)) / error[0][good]
        assert 0.75 < np.nanstd(pull) < 1.25, kev
        # what is common stays within three of the errors stated for it
        assert abs(np.nanmedian(off)) < 3.0 * found.common_error([setting])[0]
        assert abs(np.nanmedian(off)) < 0.08


def test_pixels_that_do_not_work_are_flagged(
    virtual: VirtualThresholdScans, found: ThresholdEnergies
) -> None:
    for kind in (PixelKind.DEAD, PixelKind.STUCK, PixelKind.UNSTABLE):
        such = virtual.pixels.kind == kind
        assert such.any(), kind
        assert np.all(found.flags[0][such] != 0), kind


def test_prior_is_the_pixels_true_shift(
    virtual: VirtualThresholdScans, found: ThresholdEnergies
) -> None:
    setting = (30.0 - SCALE.offset_kev) / SCALE.gain_kev
    shift, sigma = threshold_prior(found, [setting, setting + 40.0])
    assert shift.shape == sigma.shape == (14, 16, 2)
    usable = found.usable[0]
    truth = virtual.energies_kev(setting)
    truth = truth - truth[usable].mean()
    left = (shift[..., 0] - truth)[usable]
    # without knowledge the pixels differ by 1 keV; with it by less than 0.06
    assert truth[usable].std() > 0.7
    assert np.sqrt(np.mean(left**2)) < 0.06
    assert np.all(np.isinf(sigma[~usable]))
    assert np.all(shift[~usable] == 0.0)
    assert threshold_levels(found, [setting])[0] == pytest.approx(30.0, abs=0.15)


def test_by_command_and_file(
    virtual: VirtualThresholdScans, found: ThresholdEnergies, tmp_path: Path
) -> None:
    paths = []
    for scan in virtual.scans:
        paths.append(str(tmp_path / f"{scan.source.emitter}.h5"))
        write_threshold_scan(scan, paths[-1])
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    command = script.load()
    assert isinstance(command, click.Group)
    output = tmp_path / "thresholds.h5"
    words = ["thresholds", *paths, "-o", str(output), "--setting", "96", "--json"]
    result = CliRunner().invoke(command, words)
    assert result.exit_code == 0, result.output
    summary = json.loads(result.stdout)
    assert summary["settings"][0]["median"] == pytest.approx(20.0, abs=0.25)
    assert [m["name"] for m in summary["landmarks"]] == list(found.landmarks)
    back = read_threshold_energies(output)
    assert np.array_equal(back.offset_kev, found.offset_kev, equal_nan=True)
    assert np.array_equal(back.flags, found.flags)
    assert len(back.process["digest"]) == 64
    text = CliRunner().invoke(command, words[:-1])
    assert "Am-241 gamma at 59.54 keV" in text.stdout
    assert "pixels have an energy scale" in text.stdout
