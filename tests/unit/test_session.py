"""The tube's output in an object scan, told from its open exposures."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import TYPE_CHECKING, Protocol

import numpy as np
import pytest

from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.session import current_of, normalise
from spectral.scans.scan import CountsInMemory, Scan

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration

PIXELS = (6, 8)
ALL = np.ones(PIXELS, bool)
TIME_S = 40.0
"""Long, so that rounding to whole counts does not matter."""


class MakeCounts(Protocol):
    """Returns counts of the calibration's pixels in a beam of given output, no noise."""

    def __call__(
        self,
        role: tuple[str, ...],
        output: np.ndarray,
        *,
        current_ma: np.ndarray | None = None,
        by_bin: np.ndarray | None = None,
    ) -> Scan: ...


@pytest.fixture(scope="module")
def calibration(make_calibration: Callable[..., Calibration]) -> Calibration:
    return make_calibration(PIXELS)


@pytest.fixture(scope="module")
def scan(calibration: Calibration) -> MakeCounts:
    def make(
        role: tuple[str, ...],
        output: np.ndarray,
        *,
        current_ma: np.ndarray | None = None,
        by_bin: np.ndarray | None = None,
    ) -> Scan:
        n, flat = len(role), np.arange(PIXELS[0] * PIXELS[1])
        current = np.full(n, 4.0) if current_ma is None else current_ma
        areal = np.array([[4.0, 1.0] if r == "object" else [0.0, 0.0] for r in role])
        bins = np.empty((n, 4, flat.size))
        for i in range(n):
            rate = calibration.expected_bins(
                areal[i : i + 1], current[i : i + 1], output[i : i + 1], flat
            )
            bins[i] = rate[:, 0].T * TIME_S * (0.0 if role[i] == "dark" else 1.0)
        if by_bin is not None:
            bins *= by_bin[:, None]
        above = np.cumsum(np.round(bins)[:, ::-1], axis=1)[:, ::-1]
        return Scan(
            counts=CountsInMemory(above.reshape(n, 4, *PIXELS).astype(np.uint32)),
            thresholds_kev=calibration.thresholds_kev,
            role=role,
            thickness_mm=np.where(areal > 0.0, np.nan, 0.0),
            materials=calibration.materials,
            count_time_s=np.full(n, TIME_S),
            current_ma=current,
            voltage_kv=90.0,
            pixel_mask=np.zeros(PIXELS, np.uint32),
        )

    return make


def test_constant_output_is_found(calibration: Calibration, scan: MakeCounts) -> None:
    role = ("dark", "open", "object", "object", "open")
    found = normalise(calibration, scan(role, np.full(5, 1.07)), ALL)
    np.testing.assert_allclose(found.output, 1.07, rtol=1e-5)
    assert found.opens.tolist() == [1, 4]
    np.testing.assert_allclose(found.by_bin, 1.0, rtol=1e-5)
    assert found.notes == ()


def test_linear_drift_between_opens_is_followed(
    calibration: Calibration, scan: MakeCounts
) -> None:
    role = ("dark", "open", "open", *["object"] * 5, "open")
    output = 0.95 + 0.01 * np.arange(9.0)
    found = normalise(calibration, scan(role, output), ALL)
    np.testing.assert_allclose(found.output, output, rtol=1e-5)
    np.testing.assert_allclose(found.open_output, output[[1, 2, 8]], rtol=1e-5)


def test_opens_on_one_side_give_their_mean(
    calibration: Calibration, scan: MakeCounts
) -> None:
    role = ("open", "open", "object", "object")
    output = np.array([1.0, 1.02, 1.04, 1.06])
    found = normalise(calibration, scan(role, output), ALL)
    np.testing.assert_allclose(found.output, 1.01, rtol=1e-5)


def test_output_is_told_from_the_current(
    calibration: Calibration, scan: MakeCounts
) -> None:
    # half the current means half the rate, and less pile-up, not less output
    role = ("open", "object", "open")
    current = np.array([4.0, 4.0, 2.0])
    found = normalise(
        calibration, scan(role, np.full(3, 1.03), current_ma=current), ALL
    )
    np.testing.assert_allclose(found.open_output, 1.03, rtol=1e-5)


def test_no_open_exposure_is_noted(calibration: Calibration, scan: MakeCounts) -> None:
    found = normalise(calibration, scan(("dark", "object"), np.full(2, 1.1)), ALL)
    np.testing.assert_array_equal(found.output, 1.0)
    np.testing.assert_array_equal(found.by_bin, 1.0)
    assert found.opens.size == found.open_output.size == 0
    assert any("no open exposure in this scan" in note for note in found.notes)


def test_moved_thresholds_show_in_the_bins(
    calibration: Calibration, scan: MakeCounts
) -> None:
    moved = np.array([1.01, 1.0, 0.99, 1.0])
    role = ("open", "object", "open")
    found = normalise(calibration, scan(role, np.ones(3), by_bin=moved), ALL)
    relative = found.by_bin / found.by_bin[1]
    # 0.1 %: the counts added or missing also move the output, and pile-up with it
    np.testing.assert_allclose(relative, moved, rtol=1e-3)


def test_unusable_pixels_are_not_asked(
    calibration: Calibration, scan: MakeCounts
) -> None:
    role = ("open", "object", "open")
    made = scan(role, np.ones(3))
    counts = made.counts.read([0, 1, 2]).copy()
    counts[:, :, 2, 3] *= 3
    usable = ALL.copy()
    usable[2, 3] = False
    found = normalise(calibration, made.with_counts(counts), usable)
    np.testing.assert_allclose(found.output, 1.0, rtol=1e-5)
    disturbed = normalise(calibration, made.with_counts(counts), ALL)
    assert disturbed.output[0] > 1.01


def test_current_that_the_scan_does_not_give_is_the_calibrations(
    calibration: Calibration, scan: MakeCounts
) -> None:
    made = scan(("open", "object"), np.ones(2))
    given = made.current_ma
    assert given is not None
    np.testing.assert_array_equal(current_of(made, calibration), given)
    unknown = current_of(replace(made, current_ma=None), calibration)
    np.testing.assert_array_equal(unknown, 4.0)


@pytest.mark.slow
def test_output_is_as_good_as_the_counts(
    calibration: Calibration, scan: MakeCounts
) -> None:
    # Poisson counts of all pixels together: relative error 1 over the root of their sum
    rng = np.random.default_rng(3)
    exact = scan(("open", "object", "open"), np.ones(3))
    counts = exact.counts.read([0, 1, 2]).astype(float)
    bins = -np.diff(counts, axis=1, append=0.0) / 400.0
    short = replace(exact, count_time_s=np.full(3, TIME_S / 400.0))
    pulls = []
    for _ in range(20):
        drawn = np.cumsum(rng.poisson(bins)[:, ::-1], axis=1)[:, ::-1]
        found = normalise(calibration, short.with_counts(drawn.astype(np.uint32)), ALL)
        error = 1.0 / np.sqrt(counts[0, 0].sum() / 400.0)
        pulls.extend((found.open_output - 1.0) / error)
    # pile-up hides part of a change of the output: its error is a little larger
    assert abs(np.mean(pulls)) < 5.0 / np.sqrt(40) * 1.3
    assert 0.75 < np.std(pulls) < 1.6


@pytest.mark.parametrize("opens", [True, False])
def test_the_record_tells_whether_pixels_were_followed(
    calibration: Calibration, make_series: Callable[..., Scan], opens: bool
) -> None:
    made = make_series(calibration, 1)
    role = tuple("object" if r == "open" and not opens else r for r in made.role)
    record = MaterialDecomposer(calibration).decompose(replace(made, role=role)).process
    assert json.loads(record["options"])["follow_pixels"] is opens


def test_bad_pixels_are_looked_for_once(
    calibration: Calibration,
    make_series: Callable[..., Scan],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    looked: list[Scan] = []

    def found(scan: Scan, **_: int) -> np.ndarray:
        looked.append(scan)
        return np.zeros(PIXELS, np.uint16)

    for module in ("decomposition.decomposer", "calibration.refresh"):
        monkeypatch.setattr(f"spectral.{module}.find_bad_pixels", found)
    decomposer = MaterialDecomposer(calibration).fit(make_series(calibration, 1))
    assert decomposer.calibration_ is not calibration
    assert len(looked) == 1
