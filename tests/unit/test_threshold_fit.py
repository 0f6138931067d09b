"""Landmarks, their fit, and the energy scale through them."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import h5py
import numpy as np
import pytest

from spectral.calibration.threshold_scan.calibrate import threshold_energies
from spectral.calibration.threshold_scan.energies_file import (
    read_threshold_energies,
    write_threshold_energies,
)
from spectral.calibration.threshold_scan.energy_scale import fit_energy_scale
from spectral.calibration.threshold_scan.flags import MEANING, ThresholdFlag
from spectral.calibration.threshold_scan.landmark_curve import (
    LN_HEIGHT,
    LN_WIDTH,
    SHIFT,
    CurveTable,
    landmark_curve,
)
from spectral.calibration.threshold_scan.landmark_shape import landmark_table
from spectral.calibration.threshold_scan.landmarks import landmark_of
from spectral.calibration.threshold_scan.result import (
    threshold_levels,
    threshold_prior,
)
from spectral.calibration.threshold_scan.source_photons import sensor_of
from spectral.calibration.threshold_scan.summary import (
    threshold_summary,
    threshold_text,
)
from spectral.errors import CalibrationError, FileFormatError, InputError
from spectral.physics.sensor import ChargeTransport
from spectral.scans.scan import Filter
from spectral.scans.threshold_scan import LineSource, ThresholdScan

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

SN = LineSource(kind="fluorescence target", emitter="Sn")
GD = LineSource(kind="fluorescence target", emitter="Gd")
AM = LineSource(kind="radionuclide", emitter="Am-241")
OFFSET, GAIN = -4.0, 0.25
ROWS, COLUMNS = 8, 10


@pytest.fixture(scope="module")
def tables() -> dict[str, CurveTable]:
    """Bare lines with a tail: no sensor, so quick to make."""
    return {
        s.emitter: landmark_table(landmark_of(s), s, None, ChargeTransport())
        for s in (SN, GD, AM)
    }


def made_up(
    tables: dict[str, CurveTable],
    *,
    falling: bool = False,
    pixels: tuple[int, int] = (ROWS, COLUMNS),
    comparators: int = 1,
) -> tuple[list[ThresholdScan], NDArray[np.float64], NDArray[np.float64]]:
    """Poisson counts on tabulated curves, with the true offset and gain."""
    rng = np.random.default_rng(5)
    count = comparators * pixels[0] * pixels[1]
    offset = OFFSET + 0.7 * rng.normal(size=count)
    gain = GAIN * (1.0 + 0.02 * rng.normal(size=count))
    if falling:
        offset, gain = 90.0 + offset, -gain
    middle, slope = (90.0 + OFFSET, -GAIN) if falling else (OFFSET, GAIN)
    scans = []
    for source in (SN, GD, AM):
        table = tables[source.emitter]
        mark = table.landmark.energy_kev
        settings = np.sort(
            np.round((mark + np.linspace(-9.0, 10.0, 32) - middle) / slope)
        )
        values = np.zeros((count, table.parameters))
        values[:, LN_WIDTH] = np.log(1.3) + 0.05 * rng.normal(size=count)
        values[:, LN_HEIGHT] = np.log(4000.0)
        values[:, -2] = 0.02
        e = offset[:, None] + gain[:, None] * settings - mark
        counts = rng.poisson(landmark_curve(table, e, values)[0]).T
        scans.append(
            ThresholdScan(
                settings=settings,
                counts=counts.reshape(-1, comparators, *pixels).astype(np.uint32),
                count_time_s=np.ones(settings.size),
                source=source,
                pixel_mask=np.zeros(pixels, np.uint32),
            )
        )
    shape = (comparators, *pixels)
    return scans, offset.reshape(shape), gain.reshape(shape)


def test_slopes_are_those_of_the_curve(tables: dict[str, CurveTable]) -> None:
    table = tables["Gd"]
    e = np.linspace(-8.0, 12.0, 41) + 0.013
    values = np.array([[0.31, np.log(1.4), np.log(900.0), 0.1, 0.02, -0.001]])
    _, slopes = landmark_curve(table, e, values)
    for place in range(table.parameters):
        # wide steps: the table is read linearly between its points
        step = 0.2 if place == SHIFT else 0.16 if place == LN_WIDTH else 1e-3
        up, down = values.copy(), values.copy()
        up[0, place] += step
        down[0, place] -= step
        change = landmark_curve(table, e, up)[0] - landmark_curve(table, e, down)[0]
        numeric = change / (2.0 * step)
        scale = np.abs(numeric).max()
        assert np.allclose(slopes[0, place], numeric[0], atol=0.02 * scale), place


@pytest.mark.parametrize("falling", [False, True])
def test_scale_of_every_pixel(tables: dict[str, CurveTable], falling: bool) -> None:
    scans, offset, gain = made_up(tables, falling=falling)
    found = threshold_energies(scans)
    assert found.landmarks == ("Sn K-alpha", "Gd K-alpha", "Am-241 gamma")
    assert (found.flags == 0).mean() > 0.98
    for kev in (30.0, 50.0):
        setting = float((kev - np.median(offset)) / np.median(gain))
        energy, error = found.energies([setting])
        pull = (energy - (offset + gain * setting)) / error
        assert 0.7 < np.std(pull) < 1.3
        off = energy - (offset + gain * setting)
        assert abs(np.median(off)) < 0.03
        assert np.abs(off).max() < 0.15


def test_several_comparators(tables: dict[str, CurveTable]) -> None:
    scans, offset, gain = made_up(tables, comparators=2)
    found = threshold_energies(scans)
    settings = [120.0, 200.0]
    energy, _ = found.energies(settings)
    for k in (0, 1):
        true = offset[k] + gain[k] * settings[k]
        assert np.abs(energy[k] - true).max() < 0.2
    with pytest.raises(InputError, match="2 comparators were scanned"):
        found.energies([100.0, 120.0, 140.0])


@pytest.mark.parametrize(
    ("source", "height", "largest_kev"),
    [
        (
            LineSource(
                kind="edge filter",
                emitter="Gd",
                voltage_kv=80.0,
                filters=(Filter(material="Gd", thickness_mm=0.15),),
            ),
            2e4,
            0.3,
        ),
        (LineSource(kind="tube end", voltage_kv=70.0), 2e4, 0.1),
    ],
)
def test_edges_and_ends_help_a_line(
    tables: dict[str, CurveTable],
    source: LineSource,
    height: float,
    largest_kev: float,
) -> None:
    rng = np.random.default_rng(8)
    scans, offset, gain = made_up(tables)
    table = landmark_table(landmark_of(source), source, None, ChargeTransport())
    mark = table.landmark.energy_kev
    settings = np.round((mark + np.linspace(-9.0, 9.0, 36) - OFFSET) / GAIN)
    values = np.zeros((ROWS * COLUMNS, table.parameters))
    values[:, LN_WIDTH] = np.log(1.3)
    values[:, LN_HEIGHT] = np.log(height)
    e = offset.reshape(-1, 1) + gain.reshape(-1, 1) * settings - mark
    counts = rng.poisson(landmark_curve(table, e, values)[0]).T
    other = replace(
        scans[0],
        source=source,
        settings=settings,
        counts=counts.reshape(-1, 1, ROWS, COLUMNS).astype(np.uint32),
        count_time_s=np.ones(settings.size),
        nominal_scale=(OFFSET + 0.5, GAIN),
    )
    found = threshold_energies([scans[0], other])
    true_kev = offset + gain * found.place[1]
    off = true_kev - mark
    assert abs(off.mean()) < 0.1 + 3.0 * off.std() / np.sqrt(off.size)
    assert off.std() < largest_kev
    # errors are as large as the scatter, or larger
    assert np.median(found.place_error[1]) * GAIN > 0.7 * off.std()
    assert found.freedom.max() == 0
    if source.kind == "tube end":
        assert any("may keep rising with exposure" in a for a in found.assumptions)
        assert found.common_error_kev[1] > 0.35  # half a percent of 70 kV


def test_sick_pixels_are_flagged_with_reasons(tables: dict[str, CurveTable]) -> None:
    scans, _, _ = made_up(tables)
    counts = [s.counts.copy() for s in scans]
    counts[1][:, 0, 0, 0] = 7  # the same count at every setting
    for each in counts:
        each[:, 0, 1, 1] = 0
    counts[0][::2, 0, 2, 2] *= 3  # jumps from setting to setting
    counts[2][:, 0, 3, 3] = np.roll(counts[2][:, 0, 3, 3], 2)
    counts[2][:2, 0, 3, 3] = counts[2][2, 0, 3, 3]  # off the straight line
    mask = scans[0].pixel_mask.copy()
    mask[4, 4] = 2
    scans = [
        replace(s, counts=c, pixel_mask=mask)
        for s, c in zip(scans, counts, strict=True)
    ]
    found = threshold_energies(scans)
    flags = found.flags[0]
    assert flags[0, 0] & ThresholdFlag.LANDMARK_LOST
    assert flags[1, 1] & ThresholdFlag.MASKED
    assert flags[4, 4] & ThresholdFlag.MASKED
    assert found.landmark_flags[0, 0, 2, 2] & ThresholdFlag.POOR_FIT
    assert flags[3, 3] & ThresholdFlag.NOT_STRAIGHT
    assert (flags == 0).sum() >= ROWS * COLUMNS - 7
    shift, sigma = threshold_prior(found, [150.0])
    assert np.isinf(sigma[4, 4, 0])
    assert shift[4, 4, 0] == 0.0
    assert shift[found.usable[0], 0].mean() == pytest.approx(0.0, abs=1e-12)


def test_straight_line_by_hand() -> None:
    # Settings 100 and 200 at 20 and 60 keV: gain 0.4, offset -20. With errors of 1 and
    # 2 units: var(gain) = gain^2 (0.4^2 + 0.8^2) / 40^2, and at setting 100 the energy
    # is as uncertain as that place, 0.4 x 1 keV.
    scale = fit_energy_scale(
        np.array([20.0, 60.0]),
        np.array([[100.0], [200.0]]),
        np.array([[1.0], [2.0]]),
        np.ones((2, 1), bool),
        np.array([0.1, 0.0]),
    )
    assert scale.gain_kev[0] == pytest.approx(0.4)
    assert scale.offset_kev[0] == pytest.approx(-20.0)
    one, both, two = scale.covariance[0]
    assert two == pytest.approx(0.16 * (0.16 + 0.64) / 1600.0)
    assert one + 200.0 * both + 1e4 * two == pytest.approx(0.16)
    assert one + 400.0 * both + 4e4 * two == pytest.approx(0.64)
    # a common error of 0.1 keV at the first line is 0.1 there and 0 at the other
    one, both, two = scale.common_covariance
    assert one + 200.0 * both + 1e4 * two == pytest.approx(0.01)
    assert one + 400.0 * both + 4e4 * two == pytest.approx(0.0, abs=1e-12)
    assert scale.freedom[0] == 0


def test_one_energy_is_no_scale() -> None:
    scale = fit_energy_scale(
        np.array([20.0, 20.0, 60.0]),
        np.full((3, 1), 100.0),
        np.ones((3, 1)),
        np.array([[True], [True], [False]]),
        np.zeros(3),
    )
    assert scale.flags[0] & ThresholdFlag.TOO_FEW_LANDMARKS
    assert np.isnan(scale.gain_kev[0])


def test_what_cannot_be_calibrated(tables: dict[str, CurveTable]) -> None:
    scans, _, _ = made_up(tables, pixels=(3, 4))
    with pytest.raises(InputError, match="no threshold scan was given"):
        threshold_energies([])
    with pytest.raises(CalibrationError, match="two different known energies"):
        threshold_energies(scans[:1])
    with pytest.raises(InputError, match="comparators and pixels"):
        threshold_energies(
            [
                scans[0],
                replace(
                    scans[1],
                    counts=scans[1].counts[..., :3],
                    pixel_mask=np.zeros((3, 3), np.uint32),
                ),
            ]
        )
    with pytest.raises(InputError, match="sensor_material differs"):
        threshold_energies([scans[0], replace(scans[1], sensor_material="Si")])
    with pytest.raises(CalibrationError, match="no pixel counts in every scan"):
        threshold_energies([scans[0], replace(scans[1], counts=0 * scans[1].counts)])
    swapped = [
        replace(scans[0], source=scans[2].source),
        replace(scans[2], source=scans[0].source),
    ]
    with pytest.raises(CalibrationError, match="check which file holds which source"):
        threshold_energies(swapped)
    end = replace(scans[2], source=LineSource(kind="tube end", voltage_kv=59.54))
    with pytest.raises(CalibrationError, match="give nominal_scale"):
        threshold_energies([scans[0], end])
    few = slice(None, None, 4)
    coarse = [
        replace(
            s,
            settings=s.settings[few],
            counts=s.counts[few],
            count_time_s=s.count_time_s[few],
        )
        for s in scans
    ]
    with pytest.raises(CalibrationError, match="settings lie about"):
        threshold_energies(coarse)
    with pytest.raises(InputError, match="nuclide 'Co-57' is unknown"):
        landmark_of(LineSource(kind="radionuclide", emitter="Co-57"))


def test_energies_in_a_file(tables: dict[str, CurveTable], tmp_path: Path) -> None:
    scans, _, _ = made_up(tables, pixels=(3, 4))
    found = threshold_energies(scans)
    path = tmp_path / "thresholds.h5"
    write_threshold_energies(found, path)
    back = read_threshold_energies(path)
    assert np.array_equal(back.covariance, found.covariance)
    assert back.landmarks == found.landmarks
    assert back.scanned == found.scanned
    with h5py.File(path, "a") as file:
        file.attrs["format_version"] = 99
    with pytest.raises(FileFormatError, match="format 99 are not known"):
        read_threshold_energies(path)
    with h5py.File(path, "a") as file:
        file.attrs["format_version"] = 1
        del file["flags"]
    with pytest.raises(FileFormatError, match="lacks a part"):
        read_threshold_energies(path)
    with h5py.File(path, "w") as file:
        file.attrs["format"] = "x"
    with pytest.raises(FileFormatError, match="holds no threshold energies"):
        read_threshold_energies(path)
    with pytest.raises(InputError, match="gain_kev has shape"):
        replace(found, gain_kev=found.gain_kev[:, :2])


def test_summary_says_what_was_found(tables: dict[str, CurveTable]) -> None:
    scans, _, _ = made_up(tables, pixels=(3, 4))
    found = threshold_energies(scans)
    facts = threshold_summary(found, [150.0, 900.0])
    assert facts["pixels"] == 12
    assert [at["outside_scanned"] for at in facts["settings"]] == [False, True]
    text = threshold_text(found, [150.0, 900.0])
    assert "the sensor is not described" in text
    assert "outside the settings scanned" in text
    nothing = replace(found, flags=np.full_like(found.flags, int(ThresholdFlag.MASKED)))
    assert "0 of 12 pixels" in threshold_text(nothing)
    with pytest.raises(InputError, match="no pixel with a usable energy scale"):
        threshold_levels(nothing, [150.0])


def test_every_flag_has_its_meaning() -> None:
    assert set(MEANING) == set(ThresholdFlag) - {ThresholdFlag.GOOD}


def test_a_sensor_needs_all_of_its_description(tables: dict[str, CurveTable]) -> None:
    scans, _, _ = made_up(tables, pixels=(3, 4))
    assert sensor_of(scans[0]) is None
    whole = replace(
        scans[0],
        sensor_material="CdTe",
        sensor_thickness_mm=1.0,
        pixel_size_um=(100.0, 121.0),
    )
    sensor = sensor_of(whole)
    assert sensor is not None
    assert sensor.pitch_um == pytest.approx(110.0)
