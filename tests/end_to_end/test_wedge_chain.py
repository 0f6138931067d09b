"""From photons to maps: a scan drawn event by event, calibrated and decomposed.

The scan comes from a virtual detector that shares neither sensor model nor pulse shape
nor pile-up law with the calibration: photons are followed one by one, pulses rise and
fall smoothly and are compared with each pixel's own thresholds.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.calibrator import WedgeCalibrator
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.errors import InputError, ScanError
from spectral.scans.flags import PixelFlag
from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan
from spectral.virtual.detector import (
    BadPixelShares,
    PixelSpread,
    VirtualDetector,
    VirtualSensor,
)
from spectral.virtual.pixels import PixelKind
from spectral.virtual.tube import VirtualTube
from spectral.virtual.virtual_scan import simulate_scan

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.maps import Maps

pytestmark = [pytest.mark.end_to_end, pytest.mark.slow]

ROWS = COLUMNS = 10
REPEATS = 8
SENSOR_MM, PITCH_UM = 1.0, 100.0
DETECTOR = VirtualDetector(
    name="invented for this test",
    sensor=VirtualSensor(
        material="CdTe",
        density_g_cm3=5.85,
        thickness_um=1e3 * SENSOR_MM,
        pitch_um=PITCH_UM,
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
    bad_pixels=BadPixelShares(dead=0.02, noisy=0.03),
)
TUBE = VirtualTube(photons_per_mas=20_000.0, drift_step=5e-4)
MATERIALS = (
    Layer(name="PMMA", formula="C5H8O2", density_g_cm3=1.19),
    Layer(name="Al", formula="Al", density_g_cm3=2.70),
)
STEPS_MM = np.array(
    [(p, a) for p in (0.0, 15.0, 35.0, 60.0) for a in (0.0, 1.0, 4.0, 8.0)][1:]
)
OBJECT_MM = np.array([(6.0, 0.5), (20.0, 2.0), (30.0, 5.0), (50.0, 1.0)])


@dataclass(frozen=True, kw_only=True)
class Bench:
    """What was simulated, and what is true of it."""

    wedge: Scan
    object: Scan
    truth: NDArray[np.float64]
    kind: NDArray[np.uint8]


def part(scan: Scan, exposures: NDArray[np.int64]) -> Scan:
    """Some exposures of a scan as a scan of their own."""
    assert scan.current_ma is not None
    return replace(
        scan,
        counts=CountsInMemory(scan.counts.read(exposures)),
        role=tuple(scan.role[i] for i in exposures),
        thickness_mm=scan.thickness_mm[exposures],
        count_time_s=scan.count_time_s[exposures],
        current_ma=scan.current_ma[exposures],
    )


def template(
    role: list[str],
    thickness: NDArray[np.float64],
    current: NDArray[np.float64],
    time: NDArray[np.float64],
) -> Scan:
    n = len(role)
    return Scan(
        counts=CountsInMemory(np.zeros((n, 4, ROWS, COLUMNS), np.uint32)),
        thresholds_kev=np.array(DETECTOR.thresholds_kev),
        role=tuple(role),
        thickness_mm=thickness,
        materials=MATERIALS,
        count_time_s=time,
        current_ma=current,
        voltage_kv=90.0,
        filters=(Filter(material="Al", thickness_mm=2.0),),
        sensor_material="CdTe",
        sensor_thickness_mm=SENSOR_MM,
        pixel_size_um=(PITCH_UM, PITCH_UM),
        pixel_mask=np.zeros((ROWS, COLUMNS), np.uint32),
    )


@pytest.fixture(scope="module")
def bench() -> Bench:
    """A wedge scan and an object scan of one detector, in one run of the tube."""
    steps = np.random.default_rng(4).permutation(STEPS_MM)
    wedge = ["dark", *["open"] * 4, *["wedge"] * len(steps), "open", "open"]
    objects = ["dark", "open", "open", *["object"] * REPEATS, "open", "open"]
    none = np.zeros((1, 2))
    unknown = np.full((REPEATS, 2), np.nan)
    thickness = np.concatenate(
        [none.repeat(5, 0), steps, none.repeat(5, 0), unknown, none.repeat(2, 0)]
    )
    role = wedge + objects
    current = np.where(np.array(role) == "dark", 0.0, 4.0)
    current[[3, 4]] = 2.0, 1.0
    time = np.full(len(role), 0.25)
    time[np.array(role) == "object"] = 0.1
    density = np.array([m.density_g_cm3 for m in MATERIALS])
    place = np.add.outer(np.arange(ROWS) // 5 * 2, np.arange(COLUMNS) // 5)
    truth = np.moveaxis(OBJECT_MM[place] * 0.1 * density, -1, 0)
    run = simulate_scan(
        template(role, thickness, current, time),
        DETECTOR,
        TUBE,
        seed=7,
        object_areal_density=truth,
    )
    first = len(wedge)
    return Bench(
        wedge=part(run.scan, np.arange(first)),
        object=part(run.scan, np.arange(first, len(role))),
        truth=truth,
        kind=run.pixels.kind,
    )


@pytest.fixture(scope="module")
def calibration(bench: Bench) -> Calibration:
    return (
        WedgeCalibrator(rounds=4, samples=512, leave_out=False)
        .fit(bench.wedge)
        .calibration_
    )


@pytest.fixture(scope="module")
def maps(bench: Bench, calibration: Calibration) -> Maps:
    return MaterialDecomposer(calibration).decompose(bench.object)


def pulls(maps: Maps, truth: NDArray[np.float64]) -> NDArray[np.float64]:
    """Departures over stated errors, (exposure, material, row, column); NaN if flagged."""
    error = np.hypot(maps.areal_density_errors, maps.calibration_errors)
    good = (maps.flags == 0)[:, None]
    return np.where(good, (maps.areal_density - truth) / error, np.nan)


def test_planted_pixels_are_called_bad_and_sound_ones_are_not(
    bench: Bench, maps: Maps, calibration: Calibration
) -> None:
    planted = (bench.kind == PixelKind.DEAD) | (bench.kind == PixelKind.NOISY)
    assert (bench.kind == PixelKind.DEAD).sum() >= 2
    assert (bench.kind == PixelKind.NOISY).sum() >= 2
    bad = (maps.flags & PixelFlag.BAD_PIXEL) != 0
    assert np.all(bad[:, planted])
    # one sound pixel in a hundred may be taken for bad
    assert bad[0][bench.kind == PixelKind.GOOD].sum() <= 1
    assert np.all(calibration.pixel_reasons[planted] != 0)
    assert np.all(np.isnan(maps.areal_density[:, :, planted]))


def test_estimates_are_unbiased_and_their_errors_true(bench: Bench, maps: Maps) -> None:
    found = pulls(maps, bench.truth)
    pixels = int(np.isfinite(found[0, 0]).sum())
    assert pixels > 0.9 * ROWS * COLUMNS
    for material in range(2):
        pull = found[:, material]
        # REPEATS x pixels draws: mean known to 0.04, width to 0.03; what the calibration
        # leaves is common to all repeats, about 0.13 of an error in each pixel
        assert abs(np.nanmean(pull)) < 0.2
        assert np.nanstd(pull) == pytest.approx(1.0, abs=0.12)
        # between repeats of one pixel only counting statistics speak
        left = maps.areal_density[:, material] - bench.truth[material]
        left = left / maps.areal_density_errors[:, material]
        every = np.isfinite(pull).all(axis=0)
        scatter = np.sqrt(np.mean(np.var(left[:, every], axis=0, ddof=1)))
        assert scatter == pytest.approx(1.0, abs=5.0 / np.sqrt(2 * 7 * every.sum()))


def test_every_stack_is_found(bench: Bench, maps: Maps) -> None:
    found = pulls(maps, bench.truth)
    density = np.array([m.density_g_cm3 for m in MATERIALS])
    for stack in OBJECT_MM * 0.1 * density:
        here = np.isclose(bench.truth[0], stack[0]) & np.isclose(
            bench.truth[1], stack[1]
        )
        for material in range(2):
            mean = np.nanmean(found[:, material][:, here])
            # some 190 draws: 0.07, and a third of an error for the calibration
            assert abs(mean) < 5 * 0.07 + 0.33


def test_counts_fit_and_nothing_is_flagged_for_nothing(maps: Maps) -> None:
    sound = (maps.flags & PixelFlag.BAD_PIXEL) == 0
    assert (maps.flags[sound] != 0).mean() < 0.01
    # four bins less two materials: mean 1, of some 750 values with standard deviation 1
    assert np.nanmean(maps.deviance[sound]) == pytest.approx(1.0, abs=0.25)


def test_mean_of_repeats_is_nearer_to_the_truth(bench: Bench, maps: Maps) -> None:
    # errors fall as the square root of the number (common practice, no source), down to
    # what the calibration leaves
    left = np.where(
        (maps.flags == 0)[:, None], maps.areal_density - bench.truth, np.nan
    )
    good = np.isfinite(left).all(axis=(0, 1))
    single = np.sqrt(np.mean(left[:, :, good] ** 2, axis=(0, 2)))
    mean = np.sqrt(np.mean(left[:, :, good].mean(axis=0) ** 2, axis=1))
    assert np.all(mean < 1.3 * single / np.sqrt(REPEATS))


def test_thresholds_and_dead_time_of_the_average_pixel(
    calibration: Calibration,
) -> None:
    # thresholds need not come back exactly, for the model's sensor is another one; but
    # they stay within what a person would call the same setting
    assert np.abs(calibration.levels_kev - DETECTOR.thresholds_kev).max() < 2.5
    assert 45.0 < calibration.dead_time_ns < 180.0
    # the steps are met to a tenth of a percent or so
    assert np.median(np.abs(calibration.steps.residual)) < 3e-3


def test_calibration_from_its_file_gives_the_same_maps(
    bench: Bench, calibration: Calibration, maps: Maps, tmp_path: Path
) -> None:
    write_calibration(calibration, tmp_path / "calibration.h5")
    again = MaterialDecomposer(read_calibration(tmp_path / "calibration.h5")).decompose(
        bench.object
    )
    np.testing.assert_array_equal(again.flags, maps.flags)
    np.testing.assert_allclose(
        again.areal_density, maps.areal_density, rtol=1e-5, atol=1e-6
    )
    assert again.process["calibration_digest"] != ""


def test_impossible_counts_are_flagged_where_they_are(
    bench: Bench, calibration: Calibration
) -> None:
    spoilt = bench.object.counts.read(range(bench.object.shape[0])).copy()
    row, column = np.argwhere(calibration.good)[30]
    spoilt[4, 2, row, column] = spoilt[4, 1, row, column] + 500
    found = MaterialDecomposer(calibration).decompose(
        bench.object.with_counts(spoilt), exposures=[3, 4]
    )
    faulty = (found.flags & PixelFlag.COUNT_FAULT) != 0
    assert np.argwhere(faulty).tolist() == [[1, row, column]]


def test_scan_of_another_setting_is_refused(
    bench: Bench, calibration: Calibration
) -> None:
    decomposer = MaterialDecomposer(calibration)
    with pytest.raises(ScanError, match="was taken at 80 kV and not at 90 kV; use"):
        decomposer.decompose(replace(bench.object, voltage_kv=80.0))
    moved = replace(bench.object, thresholds_kev=bench.object.thresholds_kev + 1.0)
    with pytest.raises(ScanError, match="has thresholds at"):
        decomposer.decompose(moved)
    with pytest.raises(ScanError, match="no exposure has the role 'object'"):
        decomposer.decompose(bench.wedge)
    with pytest.raises(InputError, match="exposures 0 to 12 exist, asked for 40"):
        decomposer.decompose(bench.object, exposures=[40])
