"""Descriptions of detectors, wedges and tubes: what is read, and what is refused."""

from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.physics.materials import find_material
from spectral.virtual.detector import (
    BadPixelShares,
    PixelSpread,
    VirtualDetector,
    VirtualSensor,
    read_detector,
)
from spectral.virtual.pixels import PixelKind, draw_pixels, jumps_kev
from spectral.virtual.tube import VirtualTube

CALIBRATIONS = Path(__file__).parents[2] / "calibrations"
DETECTORS = sorted(CALIBRATIONS.glob("detector_*.toml"))
WEDGES = sorted(CALIBRATIONS.glob("wedge_*.toml"))
SENSOR = VirtualSensor(
    material="CdTe",
    density_g_cm3=5.85,
    thickness_um=1000.0,
    pitch_um=110.0,
    bias_v=500.0,
    pair_energy_ev=4.43,
    fano=0.1,
    relative_permittivity=10.9,
)
DETECTOR = VirtualDetector(
    name="made up",
    sensor=SENSOR,
    thresholds_kev=(20.0, 40.0),
    noise_kev=2.0,
    dead_time_ns=100.0,
)


def test_every_detector_description_can_be_read() -> None:
    found = [read_detector(path) for path in DETECTORS]
    assert [d.sensor.material for d in found] == ["CdTe", "GaAs", "Si"]
    assert [len(d.thresholds_kev) for d in found] == [5, 3, 4]
    assert [d.sensor.thickness_um for d in found] == [1000.0, 500.0, 500.0]
    for detector in found:
        assert "invented" in detector.note.lower()
        assert find_material(detector.sensor.material).density_g_cm3 > 2.0


@pytest.mark.parametrize("path", WEDGES, ids=lambda path: path.stem)
def test_every_wedge_description_can_be_built_from_its_plates(path: Path) -> None:
    wedge = tomllib.loads(path.read_text(encoding="utf-8"))
    assert "invented" in wedge["note"].lower()
    stacks = np.array(wedge["stacks"]["thickness_mm"])
    assert stacks.shape[1] == len(wedge["material"])
    assert len({tuple(row) for row in stacks.tolist()}) == len(stacks)
    assert np.all(stacks.max(axis=1) > 0.0)
    for column, material in zip(stacks.T, wedge["material"], strict=True):
        found = find_material(
            material["formula"], density_g_cm3=material["density_g_cm3"]
        )
        assert found.density_g_cm3 == material["density_g_cm3"]
        sums = {0.0}
        for plate in material["plates_mm"]:
            # up to three plates of each thickness
            sums = {round(s + k * plate, 6) for s in sums for k in range(4)}
        assert {round(t, 6) for t in column.tolist()} <= sums
    # mixed stacks tie the materials together
    assert ((stacks > 0.0).sum(axis=1) > 1).any()


GOOD = """
name = "made up"
[sensor]
material = "Si"
density_g_cm3 = 2.33
thickness_um = 300.0
pitch_um = 75.0
bias_v = 100.0
pair_energy_ev = 3.62
fano = 0.115
relative_permittivity = 11.7
[electronics]
thresholds_kev = [8, 20]
noise_kev = 1.0
dead_time_ns = 50.0
pulse_shape = "rectangle"
"""


def test_a_description_fills_in_what_it_does_not_say(tmp_path: Path) -> None:
    path = tmp_path / "d.toml"
    path.write_text(GOOD)
    found = read_detector(path)
    assert found.thresholds_kev == (8.0, 20.0)
    assert found.spread == PixelSpread()
    assert found.bad_pixels == BadPixelShares()
    assert found.pulse_time_ns == 50.0
    assert found.count_limit == 2**32 - 1


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("fano = 0.115", "phano = 0.115", r"d.toml \[sensor\]: field 'phano'"),
        ("fano = 0.115", "", r"d.toml \[sensor\]: .*fano"),
        ("noise_kev = 1.0", "", r"d.toml \[electronics\]: .*noise_kev"),
        ("[electronics]", "[circuits]", r"d.toml: the description lacks"),
        ('name = "made up"', 'name = "x"\ncolour = 1', r"unknown entries \['colour'\]"),
        ("name", "name name", "d.toml: not a detector description"),
        ('"rectangle"', '"triangle"', "pulse_shape 'triangle' is unknown"),
        ("bias_v = 100.0", "bias_v = 0.0", "sensor bias_v must be positive, got 0.0"),
        ("noise_kev = 1.0", "noise_kev = -1.0", "noise_kev must not be negative"),
        ("noise_kev = 1.0", "noise_kev = 1.0\ncounter_bits = 40", "counter_bits must"),
        ("fano = 0.115", "fano = 0.1\ngap_loss = 2.0", "gap_loss must lie in"),
    ],
)
def test_descriptions_that_cannot_be(
    tmp_path: Path, old: str, new: str, message: str
) -> None:
    path = tmp_path / "d.toml"
    path.write_text(GOOD.replace(old, new, 1))
    with pytest.raises(InputError, match=message):
        read_detector(path)


@pytest.mark.parametrize(
    ("shape", "pulse_time"),
    [
        # time above half the peak: width; tau ln 2; roots of s exp(1 - s) = 1/2
        # (s = -W(-1/(2e)): 0.231961 and 2.678347)
        ("rectangle", 100.0),
        ("exponential", 100.0 / np.log(2.0)),
        ("semi-gaussian", 100.0 / (2.678347 - 0.231961)),
    ],
)
def test_dead_time_is_the_time_above_half_the_peak(
    shape: str, pulse_time: float
) -> None:
    found = replace(DETECTOR, pulse_shape=shape).pulse_time_ns
    assert found == pytest.approx(pulse_time, rel=1e-6)


def test_pixels_are_spread_as_described() -> None:
    spread = PixelSpread(
        threshold_kev=0.5, threshold_common_kev=0.3, gain=0.02, noise=0.1, area=0.03
    )
    bad = BadPixelShares(
        dead=0.01, stuck=0.02, noisy=0.03, unstable=0.04, broken_columns=2
    )
    detector = replace(DETECTOR, spread=spread, bad_pixels=bad)
    rng = np.random.default_rng(1)
    pixels = draw_pixels(detector, np.array([20.0, 40.0]), (200, 200), rng)
    offset = pixels.thresholds_kev - np.array([20.0, 40.0])[:, None, None]
    # 40 000 pixels: standard deviations are known to 0.35 %, correlations to 0.005
    assert offset.std() == pytest.approx(np.hypot(0.5, 0.3), rel=0.02)
    correlation = np.corrcoef(offset[0].ravel(), offset[1].ravel())[0, 1]
    assert correlation == pytest.approx(0.09 / 0.34, abs=0.025)
    assert pixels.gain.std() == pytest.approx(0.02, rel=0.02)
    assert pixels.area.std() == pytest.approx(0.03, rel=0.02)
    share = {kind: float((pixels.kind == kind).mean()) for kind in PixelKind}
    for kind, expected in zip(
        list(PixelKind)[1:5], (0.01, 0.02, 0.03, 0.04), strict=True
    ):
        assert share[kind] == pytest.approx(expected, abs=4 * 0.001)
    noisy = pixels.noise_kev[pixels.kind == PixelKind.NOISY]
    assert noisy.min() > 2.0 * pixels.noise_kev[pixels.kind == PixelKind.GOOD].mean()
    broken = (pixels.kind == PixelKind.BROKEN_COLUMN).sum(axis=0)
    assert (broken > 0).sum() == 2
    assert broken.max() < 200
    jumps = jumps_kev(pixels, rng)
    assert np.all(jumps[pixels.kind != PixelKind.UNSTABLE] == 0.0)
    assert np.unique(jumps).size == 3


def test_thresholds_too_close_for_their_spread_are_refused() -> None:
    detector = replace(DETECTOR, spread=PixelSpread(threshold_kev=3.0))
    with pytest.raises(
        InputError, match=r"thresholds \[20.0, 22.0\] keV are too close"
    ):
        draw_pixels(
            detector, np.array([20.0, 22.0]), (20, 20), np.random.default_rng(1)
        )


def test_tube_drifts_warms_up_and_leans() -> None:
    tube = VirtualTube(
        photons_per_mas=1e5,
        drift_step=0.01,
        warm_up=0.2,
        warm_up_exposures=3.0,
        heel=-0.1,
        heel_tungsten_um=2.0,
    )
    output = tube.output(4000, np.random.default_rng(2))
    steps = np.diff(np.log(output[50:]))
    assert steps.std() == pytest.approx(0.01, rel=0.05)
    still = replace(tube, drift_step=0.0).output(10, np.random.default_rng(2))
    np.testing.assert_allclose(still, 1.0 - 0.2 * np.exp(-np.arange(10) / 3.0))
    rows = tube.over_rows(5)
    assert rows.mean() == pytest.approx(1.0)
    assert rows[-1] / rows[0] == pytest.approx(0.9)
    # 2 um of tungsten, 19.3 g/cm3
    np.testing.assert_allclose(tube.anode_path_g_cm2(3), [0.0, 1.93e-3, 3.86e-3])
    assert replace(tube, heel=0.0).over_rows(1).tolist() == [1.0]


@pytest.mark.parametrize(
    ("field", "message"),
    [
        ({"photons_per_mas": 0.0}, "photons_per_mas must be positive, got 0.0"),
        ({"photons_per_mas": 1.0, "warm_up": 1.0}, r"warm_up must lie in \[0, 1\)"),
        ({"photons_per_mas": 1.0, "heel": -2.0}, "heel must exceed -1"),
    ],
)
def test_tubes_that_cannot_be(field: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message):
        VirtualTube(**field)
