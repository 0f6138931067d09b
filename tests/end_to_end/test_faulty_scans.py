"""Faults planted into virtual wedge scans: left out, named and written, or refused.

The kinds of faults are those of the table in tests/benchmarks; here several of them
spoil one scan together.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.calibrator import WedgeCalibrator
from spectral.errors import CalibrationError
from spectral.scans.exposure_problems import ExposureProblem, ProblemKind

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

pytestmark = [pytest.mark.end_to_end, pytest.mark.slow]

THICKNESS, CURRENT, COPY, OPEN = 9, 12, 20, 16
SWAPPED = (10, 22)


@pytest.fixture(scope="module")
def kinds(load_benchmark: Callable[[str], Any]) -> Any:
    """The module of planted faults."""
    return load_benchmark("fault_kinds")


@pytest.fixture(scope="module")
def bench(kinds: Any, tmp_path_factory: pytest.TempPathFactory) -> Any:
    return kinds.bench(1, tmp_path_factory.mktemp("scans"), kinds.sensor_library())


@pytest.fixture(scope="module")
def spoilt(kinds: Any, bench: Any) -> Scan:
    """A layer 20 % off, a current 10 % off, a copy, an open with a step, a swap."""
    truth = bench.clean.thickness_mm.copy()
    truth[THICKNESS, 1] *= 0.8
    truth[OPEN] = truth[CURRENT]
    current = np.array(bench.clean.current_ma)
    current[CURRENT] *= 0.9
    counts = bench.counts
    changed = [THICKNESS, CURRENT, OPEN]
    counts[changed] = bench.exposed(
        changed, true_thickness_mm=truth, true_current_ma=current
    )
    counts[COPY] = counts[COPY - 2]
    a, b = SWAPPED
    mm = bench.clean.thickness_mm
    said: Scan = kinds.said_otherwise(bench, {a: mm[b], b: mm[a]})
    return said.with_counts(counts)


def calibrator(**options: Any) -> WedgeCalibrator:
    return WedgeCalibrator(rounds=5, samples=256, leave_out=False, **options)


@pytest.fixture(scope="module")
def calibration(spoilt: Scan) -> Calibration:
    return calibrator().fit(spoilt).calibration_


def about(calibration: Calibration, exposure: int) -> str:
    (text,) = [f for f in calibration.findings if f.startswith(f"exposure {exposure}:")]
    return text


def test_all_faults_are_found_and_nothing_else(calibration: Calibration) -> None:
    faulty = {THICKNESS, CURRENT, COPY, OPEN, *SWAPPED}
    assert len([f for f in calibration.findings if "exposure " in f[:9]]) == len(faulty)
    assert all(about(calibration, e).endswith("; left out") for e in faulty)
    assert not faulty & set(calibration.steps.exposure.tolist())


def test_each_is_named_with_a_value(
    kinds: Any, bench: Any, calibration: Calibration
) -> None:
    mm = bench.clean.thickness_mm
    truth = mm[THICKNESS] * np.array([1.0, 0.8])
    assert mm[THICKNESS, 1] > 0.0
    assert kinds.rank(
        about(calibration, THICKNESS),
        lambda words: kinds.layer_alone(words, "Al", truth[1]),
    )
    assert kinds.rank(
        about(calibration, CURRENT), lambda words: kinds.near(words, "% of that", 90.0)
    )
    assert f"counts are those of exposure {COPY - 2} " in about(calibration, COPY)
    assert kinds.rank(
        about(calibration, OPEN), lambda words: kinds.has_stack(words, mm[CURRENT])
    )
    for one, other in (SWAPPED, SWAPPED[::-1]):
        assert f"swapped with exposure {other};" in about(calibration, one)


def test_choice_is_written_in_the_file(
    calibration: Calibration, tmp_path: Path
) -> None:
    write_calibration(calibration, tmp_path / "calibration.h5")
    again = read_calibration(tmp_path / "calibration.h5")
    assert again.findings == calibration.findings


def test_calibration_is_as_good_as_without_the_faulty_exposures(
    bench: Any, calibration: Calibration
) -> None:
    clean = calibrator().fit(bench.clean).calibration_
    assert [f for f in clean.findings if f.startswith("exposure")] == []
    assert np.abs(calibration.levels_kev - clean.levels_kev).max() < 0.5
    areal = clean.steps.areal_density[6:20]
    pixels = np.flatnonzero((clean.good & calibration.good).ravel())

    def mean(made: Calibration) -> Any:
        current = np.full(len(areal), 4.0)
        return made.expected_bins(areal, current, np.ones(len(areal)), pixels).mean(0)

    # a fifth of the exposures is gone: statistics of the rest
    np.testing.assert_allclose(mean(calibration), mean(clean), rtol=0.02)


def test_faulty_scan_is_refused_if_so_wished(spoilt: Scan) -> None:
    with pytest.raises(CalibrationError, match=rf"exposure {THICKNESS}: the scan says"):
        calibrator(faults="refuse").fit(spoilt)


@pytest.mark.parametrize(
    ("kind", "comes_back"),
    [(ProblemKind.LABEL, True), (ProblemKind.REPEATED, False)],
)
def test_sound_exposure_under_suspicion_comes_back_if_only_its_level_was_doubted(
    bench: Any, monkeypatch: pytest.MonkeyPatch, kind: ProblemKind, comes_back: bool
) -> None:
    doubted = ExposureProblem(exposure=THICKNESS, kind=kind, text="it looks odd")
    monkeypatch.setattr(
        "spectral.calibration.calibrator.exposure_problems", lambda *_: [doubted]
    )
    found = calibrator().fit(bench.clean).calibration_
    assert (THICKNESS in found.steps.exposure) == comes_back
    said = f"exposure {THICKNESS}: it looks odd; left out"
    assert found.findings == (() if comes_back else (said,))


def test_polarisation_is_told_of(kinds: Any, bench: Any) -> None:
    planted = kinds.polarisation(bench, np.random.default_rng(1))
    found = calibrator().fit(planted.scan).calibration_.findings
    assert planted.named({}, list(found)), found
    assert not any(text.startswith("exposure") for text in found)
