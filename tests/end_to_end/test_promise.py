"""What a calibration promises of itself, held against what its maps turn out to be.

The scans come from a virtual detector that counts event by event; the instrument is
that of the tables in tests/benchmarks.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.calibration.promise import promise
from spectral.decomposition.decomposer import MaterialDecomposer

if TYPE_CHECKING:
    from collections.abc import Callable
    from types import ModuleType

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration, Promise
    from spectral.scans.scan import Scan

pytestmark = [pytest.mark.end_to_end, pytest.mark.slow]

PIXELS, LOSS = 15, 0.02
SHARE = 0.25
"""Of the benchmarks' count time."""
LONG, REPEATS = 20.0, 4
"""Count time of an object exposure over that of a wedge step, and their number."""
WITHIN = 0.2


def calibrated(scan: Scan, *, excluded: tuple[int, ...] = ()) -> Calibration:
    fit = WedgeCalibrator(
        rounds=5, samples=512, faults="keep", excluded=excluded, leave_out=not excluded
    )
    return fit.fit(scan).calibration_


@pytest.fixture(scope="module")
def table(load_benchmark: Callable[[str], ModuleType]) -> ModuleType:
    """The module that describes the instrument."""
    return load_benchmark("witness_table")


@pytest.fixture(scope="module")
def instrument(table: ModuleType) -> Any:
    (bench,) = (b for b in table.BENCHES if b.detector == "cdte")
    made = table.Instrument.build(replace(bench, loss=LOSS), pixels=PIXELS)
    return replace(made, full_s=SHARE * made.full_s)


@pytest.fixture(scope="module")
def wedge(instrument: Any) -> Scan:
    scan: Scan = instrument.wedge_scan().scan
    return scan


@pytest.fixture(scope="module")
def calibration(wedge: Scan) -> Calibration:
    return calibrated(wedge)


def promised(calibration: Calibration) -> Promise:
    assert calibration.promise is not None
    return calibration.promise


@dataclass(frozen=True, kw_only=True)
class Pattern:
    """Of each material, in errors of one exposure as long as a wedge step."""

    found: NDArray[np.float64]
    stated: NDArray[np.float64]


@pytest.fixture(scope="module")
def pattern(instrument: Any, table: ModuleType, calibration: Calibration) -> Pattern:
    """Spread between the pixels of nine regions that their own counts do not explain.

    Without the object's own open exposures, which would sharpen the pixels.
    """
    region = np.arange(PIXELS) * 3 // PIXELS
    region = 3 * region[:, None] + region
    layers = np.moveaxis(np.array(instrument.bench.regions_mm)[region], 2, 0)
    role = ["dark", "open", *["object"] * REPEATS, "open"]
    seen = instrument.scan(
        role,
        [(0.0, 0.0)] * len(role),
        [0.0, *[table.FULL_MA] * (len(role) - 1)],
        [instrument.full_s * (LONG if r == "object" else 4.0) for r in role],
        seed=11,
        object_mm=layers,
    )
    maps = MaterialDecomposer(calibration, follow_pixels=False).decompose(seen.scan)
    good = calibration.good
    found, stated = np.empty(2), np.empty(2)
    for m in range(2):
        value = maps.areal_density[:, m].astype(np.float64)
        inside, own = [], []
        for index in range(9):
            here = good & (region == index)
            noise = value[:, here].var(axis=0, ddof=1).mean()
            between = value[:, here].mean(axis=0).var(ddof=1)
            inside.append((between - noise / REPEATS) / (LONG * noise))
            share = maps.calibration_errors[:, m][:, here].astype(np.float64)
            own.append((share**2).mean() / (LONG * noise))
        found[m], stated[m] = np.sqrt(np.mean(inside)), np.sqrt(np.mean(own))
    return Pattern(found=found, stated=stated)


def test_fixed_pattern_is_as_promised(
    calibration: Calibration, pattern: Pattern
) -> None:
    # 225 pixels tell the pattern to some 6 %
    ratio = promised(calibration).fixed_pattern / pattern.found
    np.testing.assert_allclose(ratio, 1.0, atol=WITHIN)


def test_maps_state_their_fixed_pattern(pattern: Pattern) -> None:
    np.testing.assert_allclose(pattern.stated / pattern.found, 1.0, atol=WITHIN)


def test_a_calibration_that_knows_its_pixels_worse_promises_less(
    calibration: Calibration, pattern: Pattern
) -> None:
    # were the pixels known half as well, the comparison would show it
    covariance = calibration.departure_covariance * np.float32(4.0)
    wrong = promise(replace(calibration, departure_covariance=covariance))
    assert np.all(wrong.fixed_pattern / pattern.found > 1.5 + WITHIN)


def test_left_out_step_is_missed_as_promised(
    wedge: Scan, calibration: Calibration
) -> None:
    # the promise only lets the smooth correction forget the step; here the whole
    # calibration never saw it
    told = promised(calibration)
    missed = np.abs(told.bias / told.single_error).max(axis=1)
    worst = int(np.argmax(missed))
    exposure = int(told.exposure[worst])
    without = calibrated(wedge, excluded=(exposure,))
    maps = MaterialDecomposer(without, follow_pixels=False).decompose(
        wedge, exposures=[exposure]
    )
    said = wedge.areal_density[exposure]
    bias = maps.areal_density[0][:, without.good].mean(axis=1) - said
    # far beyond what rounding or the first order of the promise could do
    assert missed[worst] > 0.05
    np.testing.assert_allclose(told.bias[worst] / bias, 1.0, atol=WITHIN)
    single = maps.areal_density_errors[0][:, without.good].mean(axis=1)
    np.testing.assert_allclose(told.single_error[worst] / single, 1.0, atol=0.1)
