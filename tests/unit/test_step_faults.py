"""Faulty exposures planted into a made-up calibration: found, named, nothing else."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.fault_hypotheses import FaultKind
from spectral.calibration.output_trend import output_trend
from spectral.calibration.seen_exposure import look_at
from spectral.calibration.step_faults import (
    StepFault,
    find_step_faults,
    name_faults,
)
from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)
from spectral.scans.scan import CountsInMemory, Scan

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

ERROR = 1e-3


def log_bins(
    calibration: Calibration,
    areal: NDArray[np.float64],
    *,
    output: float = 1.0,
    shift_kev: float = 0.0,
) -> NDArray[np.float64]:
    """Logarithm of the average pixel's bin counts behind one stack."""
    rate = calibration.photons_per_mas * 4.0 * output
    tables = curve_tables(calibration.model, areal[None], rate)
    average = PixelDepartures(values=np.zeros((1, calibration.levels_kev.size + 3)))
    above, _ = expected_above(tables, calibration.levels_kev + shift_kev, average)
    return np.asarray(np.log(counts_to_bins(above[0, 0])))


class Plant:
    """A calibration whose exposures can be made to depart from what the scan says."""

    def __init__(self, calibration: Calibration, seed: int = 1) -> None:
        rng = np.random.default_rng(seed)
        steps = calibration.steps
        count, bins = steps.error.shape
        self.areal = steps.areal_density
        self.clean = calibration
        self.total = rng.normal(0.0, ERROR, (count, bins))
        self.total += rng.normal(0.0, 5e-4, (count, 1))

    def truly(
        self,
        exposure: int,
        areal: NDArray[np.float64] | None = None,
        *,
        output: float = 1.0,
        shift_kev: float = 0.0,
    ) -> None:
        """What truly was in one exposure."""
        said = self.areal[exposure]
        there = log_bins(
            self.clean,
            said if areal is None else areal,
            output=output,
            shift_kev=shift_kev,
        )
        self.total[exposure] += there - log_bins(self.clean, said)

    @property
    def calibration(self) -> Calibration:
        """The calibration as it would have been left."""
        left = np.expm1(self.total)
        steps = replace(
            self.clean.steps,
            physics_residual=left,
            residual=left,
            error=np.full_like(left, ERROR),
        )
        return replace(self.clean, steps=steps)

    @property
    def found(self) -> dict[int, StepFault]:
        """Faults by exposure."""
        return {f.exposure: f for f in find_step_faults(self.calibration)}


@pytest.fixture
def plant(make_calibration: Callable[[], Calibration]) -> Plant:
    return Plant(make_calibration())


def values(text: str, unit: str) -> tuple[float, float]:
    """The first value with its error and unit in a sentence."""
    found = re.search(rf"([-+]?[\d.]+) \+- ([\d.]+) {unit}", text)
    assert found is not None, text
    return float(found[1]), float(found[2])


def test_clean_scans_raise_no_alarm(
    make_calibration: Callable[[], Calibration],
) -> None:
    made = make_calibration()
    # 160 exposures, each with a chance of 1e-6
    assert not any(Plant(made, seed).found for seed in range(10))


@pytest.mark.parametrize(("material", "name"), [(0, "PMMA"), (1, "Al")])
@pytest.mark.parametrize("factor", [0.9, 1.1])
def test_wrong_thickness(plant: Plant, material: int, name: str, factor: float) -> None:
    step = 10  # 6 g/cm2 and 2 g/cm2
    truth = plant.areal[step].copy()
    truth[material] *= factor
    plant.truly(step, truth)
    found = plant.found
    assert list(found) == [step]
    assert found[step].kind is FaultKind.THICKNESS
    said, error = values(found[step].text, f"mm {name}")
    density = plant.clean.materials[material].density_g_cm3
    assert abs(said - 10.0 * truth[material] / density) < 4.0 * error
    assert error < 0.05 * said


def test_both_layers_wrong(plant: Plant) -> None:
    step, truth = 10, np.array([3.9, 2.6])
    plant.truly(step, truth)
    found = plant.found
    assert list(found) == [step]
    assert found[step].kind is FaultKind.STACK
    np.testing.assert_allclose(found[step].fitting, truth, atol=0.15)


@pytest.mark.parametrize("output", [0.96, 1.3, 0.5])
def test_wrong_output(plant: Plant, output: float) -> None:
    plant.truly(9, output=output)
    found = plant.found
    assert list(found) == [9]
    assert found[9].kind in (FaultKind.OUTPUT, FaultKind.TIME)
    said, error = values(found[9].text, "% of that")
    assert abs(said - 100.0 * output) < 4.0 * error
    assert f"{4.0 * found[9].output:.3g} mA" in found[9].text


def test_wrong_output_is_not_its_own_excuse(
    make_calibration: Callable[[], Calibration],
) -> None:
    # a fit that holds the fault calls the tube unsteady by 1 %; the others differ by
    # 0.05 %, so that 4 % stay a fault
    made = make_calibration()
    unsteady = replace(made.residual, drift_spread=1e-2)
    plant = Plant(replace(made, residual=unsteady))
    assert plant.found == {}
    plant.truly(8, output=1.04)
    assert list(plant.found) == [8]
    assert plant.found[8].output == pytest.approx(1.04, abs=5e-3)


def test_unsteady_tube_is_no_fault(
    make_calibration: Callable[[], Calibration],
) -> None:
    made = make_calibration()
    plant = Plant(replace(made, residual=replace(made.residual, drift_spread=1e-2)))
    count = plant.total.shape[0]
    plant.total += np.random.default_rng(3).normal(0.0, 1e-2, (count, 1))
    assert plant.found == {}


def test_wrong_time_at_a_high_rate_is_no_wrong_current(plant: Plant) -> None:
    # pile-up would have changed with the current, it did not
    bright = replace(plant.clean, photons_per_mas=8e5)
    at_rate = Plant(bright)
    at_rate.total[0] += np.log(0.6)
    found = at_rate.found
    assert found[0].kind is FaultKind.TIME
    assert "of that count time (0.15 s)" in found[0].text
    assert "mA" not in found[0].text


@pytest.mark.parametrize("shift", [-1.0, 0.6])
def test_other_thresholds(plant: Plant, shift: float) -> None:
    plant.truly(5, shift_kev=shift)
    found = plant.found
    assert list(found) == [5]
    assert found[5].kind is FaultKind.THRESHOLD
    said, error = values(found[5].text, "keV from the others'")
    assert abs(said - shift) < 4.0 * error


def test_stack_of_another_step(plant: Plant) -> None:
    plant.truly(14, plant.areal[3])
    found = plant.found
    assert list(found) == [14]
    assert found[14].kind is FaultKind.ANOTHER
    assert found[14].text.endswith("mm Al, the stack of exposure 3")


def test_step_that_was_open_and_open_with_a_step(plant: Plant) -> None:
    plant.truly(7, plant.areal[0])
    assert plant.found[7].text.endswith("the counts fit an open beam")
    other = Plant(plant.clean)
    other.truly(0, plant.areal[6])
    assert "exposure 0: the scan says an open beam; the counts" in other.found[0].text


def test_swapped_steps_name_each_other(plant: Plant) -> None:
    plant.truly(6, plant.areal[12])
    plant.truly(12, plant.areal[6])
    found = plant.found
    assert sorted(found) == [6, 12]
    assert all(f.kind is FaultKind.SWAPPED for f in found.values())
    assert "exposure 6: swapped with exposure 12;" in found[6].text
    assert "exposure 12: swapped with exposure 6;" in found[12].text


def test_nothing_physical_is_called_unexplained(plant: Plant) -> None:
    plant.total[8] += np.array([0.4, -0.4, 0.4, -0.4])
    found = plant.found
    assert found[8].kind is FaultKind.UNKNOWN
    assert "no stack, no threshold and no tube output explains" in found[8].text


def test_explanations_of_equal_worth_are_all_named(plant: Plant) -> None:
    # behind the thickest stack a little output looks like a little less of a layer
    plant.truly(15, output=1.02)
    text = plant.found[15].text
    assert " (or " in text
    assert "% of that tube output" in text


def test_faults_in_many_exposures_leave_the_sound_ones_alone(plant: Plant) -> None:
    plant.truly(2, output=0.7)
    plant.truly(9, plant.areal[9] * 1.2)
    plant.truly(13, shift_kev=1.0)
    assert sorted(plant.found) == [2, 9, 13]


def test_warm_up_is_no_fault(plant: Plant) -> None:
    plant.total += np.log1p(-0.05 * np.exp(-np.arange(16) / 4.0))[:, None]
    assert plant.found == {}


def test_low_first_exposure_is_a_fault(plant: Plant) -> None:
    plant.truly(0, output=0.95)
    assert list(plant.found) == [0]


def test_single_exposures_cannot_bend_the_trend() -> None:
    place = np.arange(20)
    spoilt = np.zeros(20)
    spoilt[[0, 11]] = -0.5, 0.3
    course = output_trend(place, spoilt, at=place)
    assert np.abs(course).max() < 1e-3


def test_trend_is_followed_and_continued() -> None:
    place = np.delete(np.arange(20), 4)
    rise = -0.04 * np.exp(-np.arange(20) / 6.0) + 0.01 * np.arange(20) / 19.0
    course = output_trend(place, rise[place], at=np.arange(20))
    np.testing.assert_allclose(course, rise, atol=2e-4)
    assert not output_trend(place[:5], rise[:5], at=place).any()


def wedge_scan(calibration: Calibration, seed: int = 2) -> Scan:
    """Counts of the calibration's own exposures, some of them repeated."""
    steps = calibration.steps
    rows, columns = calibration.shape
    rate = calibration.expected_bins(
        steps.areal_density, steps.current_ma, np.ones(16), np.arange(rows * columns)
    )
    rng = np.random.default_rng(seed)
    bins = rng.poisson(0.25 * rate).transpose(1, 2, 0)
    above = np.cumsum(bins[:, ::-1], axis=1)[:, ::-1].astype(np.uint32)
    density = np.array([m.density_g_cm3 for m in calibration.materials])
    return Scan(
        counts=CountsInMemory(above.reshape(*above.shape[:2], rows, columns)),
        thresholds_kev=calibration.thresholds_kev,
        role=("open", *["wedge"] * 15),
        thickness_mm=10.0 * steps.areal_density / density,
        materials=calibration.materials,
        count_time_s=np.full(16, 0.25),
        current_ma=steps.current_ma,
        voltage_kv=90.0,
        pixel_mask=np.zeros((rows, columns), np.uint32),
    )


def named(calibration: Calibration, scan: Scan, *exposures: int) -> list[StepFault]:
    return list(name_faults(calibration, look_at(calibration, scan, exposures)))


def test_sound_exposures_get_no_name(
    make_calibration: Callable[[], Calibration],
) -> None:
    made = make_calibration()
    assert named(made, wedge_scan(made), *range(16)) == []
    assert look_at(made, wedge_scan(made), []) == []


def test_stored_images_speak_for_themselves(
    make_calibration: Callable[[], Calibration],
) -> None:
    made = make_calibration()
    scan = wedge_scan(made)
    counts = scan.counts.read(range(16)).copy()
    counts[9] = counts[4]
    counts[12, :, -2:] = 0
    copy, silent = named(made, scan.with_counts(counts), 9, 12)
    assert copy.kind is silent.kind is FaultKind.IMAGE
    assert "exposure 9: its counts are those of exposure 4 (wedge)" in copy.text
    assert silent.text == "exposure 12: 33% of the pixels count nothing"
    low = replace(scan, count_limit=int(0.9 * counts[1, 0].min()))
    (full,) = named(made, low, 1)
    assert full.text == "exposure 1: 100% of the pixels stand at the counter's limit"


def test_lost_frames_are_seen_in_the_counts(
    make_calibration: Callable[[], Calibration],
) -> None:
    made = make_calibration()
    scan = wedge_scan(made)
    counts = scan.counts.read(range(16)).copy()
    counts[7] = np.random.default_rng(1).binomial(counts[7], 1.0)
    counts[7] //= 2
    (fault,) = named(made, scan.with_counts(counts), 7)
    assert fault.output == pytest.approx(0.5, abs=0.01)
    assert fault.chi_square > 1000.0
