"""The check of a scan: every trouble it can name, and silence where there is none."""

from __future__ import annotations

import json
import re
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.scans.bad_pixels import PixelReason
from spectral.scans.counting_loss import counting_loss
from spectral.scans.dispersion import dispersions, expected_ratio
from spectral.scans.exposure_problems import ProblemKind
from spectral.scans.scan import CountsInMemory
from spectral.scans.scan_check import ScanCheck, Verdict, check_scan
from spectral.scans.scan_check_text import check_summary, check_text
from spectral.scans.stored_counts import NOT_A_COUNT
from spectral.scans.threshold_covariance import shared_pulses

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

# Order of the exposures made: 2 dark, open at half current, open, 11 steps, open,
# open at half current; objects follow.
HALF, OPEN, STEP, LAST = 2, 3, 4, 15


def counts_of(scan: Scan) -> NDArray[np.uint32]:
    return scan.counts.read(range(scan.shape[0])).copy()


def kinds(check: ScanCheck) -> dict[int, ProblemKind]:
    return {p.exposure: p.kind for p in check.problems}


def said(check: ScanCheck) -> str:
    return " | ".join((*check.causes, *check.exceptions))


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_sound_scan_is_fit(make_scan: Callable[..., Scan], seed: int) -> None:
    check = check_scan(make_scan(seed=seed, pixels=(16, 24), objects=3))
    assert check.problems == ()
    assert check.causes == ()
    assert check.bad_pixels <= 1
    if check.bad_pixels == 0:
        assert check.verdict is Verdict.FIT
    assert check.roles == {"dark": 2, "open": 4, "wedge": 11, "object": 3}
    lowest = check.thresholds[0]
    assert lowest.dark_rate_per_s == 0
    assert lowest.open_counts == pytest.approx(20_000, rel=0.02)
    assert 0.02 < lowest.spread < 0.06
    assert abs(lowest.drift) < 5 * lowest.drift_error


def test_progress_is_told(make_scan: Callable[..., Scan]) -> None:
    calls: list[tuple[int, int]] = []
    check_scan(make_scan(), progress=lambda *call: calls.append(call))
    assert calls == [(i, 17) for i in range(1, 18)]


def test_a_lost_half_of_the_count_time(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan()
    counts = counts_of(scan)
    rng = np.random.default_rng(3)
    for i in (OPEN, STEP + 4, STEP + 10):
        counts[i] = rng.binomial(counts[i], 0.5)
    check = check_scan(scan.with_counts(counts))
    assert kinds(check) == dict.fromkeys((OPEN, STEP + 4, STEP + 10), ProblemKind.LEVEL)
    assert all(
        "0.5" in p.text and "count time, current and layers" in p.text
        for p in check.problems
    )
    assert "exposures 3, 8, 14 should be looked at" in said(check)
    assert check.verdict is Verdict.EXCEPTIONS


def test_a_step_with_a_wrong_label(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan()
    thickness = scan.thickness_mm.copy()
    thickness[STEP + 3, 1] += 3.0
    check = check_scan(replace(scan, thickness_mm=thickness))
    assert kinds(check) == {STEP + 3: ProblemKind.LABEL}
    assert "are its layers right?" in check.problems[0].text


def test_few_exposures_are_compared_with_their_repeats(
    make_scan: Callable[..., Scan],
) -> None:
    scan = make_scan(wedge=False, opens=3, objects=4)
    counts = counts_of(scan)
    rng = np.random.default_rng(3)
    counts[3] = rng.binomial(counts[3], 0.7)
    counts[7] = rng.binomial(counts[7], 0.9)
    check = check_scan(scan.with_counts(counts))
    assert kinds(check) == {3: ProblemKind.DISAGREES, 7: ProblemKind.DISAGREES}
    assert "0.70 times what its repeats do (2, 4)" in check.problems[0].text


def test_an_exposure_stored_twice(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan()
    counts = counts_of(scan)
    counts[LAST] = counts[OPEN]
    check = check_scan(scan.with_counts(counts))
    assert kinds(check) == {LAST: ProblemKind.REPEATED}
    assert "those of exposure 3 (open) bit by bit" in check.problems[0].text


def test_roles_that_the_counts_contradict(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan()
    counts = counts_of(scan)
    counts[0] = counts[OPEN] // 2
    counts[LAST] = 0
    current = np.array(scan.current_ma)
    current[STEP] = 0.0
    check = check_scan(replace(scan.with_counts(counts), current_ma=current))
    assert kinds(check) == dict.fromkeys((0, LAST, STEP), ProblemKind.ROLE)
    text = check_text(check)
    assert "a dark exposure counts" in text
    assert "an open exposure counts next to nothing" in text
    assert "its tube current is given as zero" in text


def test_saturated_and_broken_exposures(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(opens=6)
    counts = counts_of(scan)
    counts[5, 0, :, :8] = 65535
    counts[6, 1, :4, 8:24] = NOT_A_COUNT
    counts[7, 2, :4, 24:] = 30_000
    check = check_scan(replace(scan.with_counts(counts), count_limit=65535))
    found = kinds(check)
    assert found[5] is ProblemKind.SATURATED
    assert found[6] is ProblemKind.NOT_COUNTS
    assert found[7] is ProblemKind.ORDER


def test_what_rules_a_scan_out(make_scan: Callable[..., Scan]) -> None:
    def causes(scan: Scan) -> str:
        check = check_scan(scan)
        assert check.verdict is Verdict.NOT_FIT
        return " | ".join(check.causes)

    assert "no open exposure to compare" in causes(make_scan(opens=0))
    scan = make_scan()
    nothing = scan.with_counts(0 * counts_of(scan))
    assert "no open exposure counts anything" in causes(nothing)
    full = scan.with_counts(np.full(scan.shape, 65535, np.uint32))
    assert "every open exposure has a problem of its own" in causes(
        replace(full, count_limit=65535)
    )
    one = [*scan.exposures("dark", "open")[:5].tolist(), STEP]
    few = replace(
        scan,
        counts=CountsInMemory(counts_of(scan)[one]),
        role=tuple(scan.role[i] for i in one),
        thickness_mm=scan.thickness_mm[one],
        count_time_s=scan.count_time_s[one],
        current_ma=None,
    )
    assert "1 usable wedge exposures are too few for 2 materials" in causes(few)
    swapped = scan.with_counts(counts_of(scan)[:, [0, 2, 1, 3]])
    assert "the threshold at 45 keV counts more than the one at 32" in causes(swapped)
    dead = counts_of(scan)
    dead[:, :, :, :10] = 0
    assert "25% of the pixels are bad" in causes(scan.with_counts(dead))


def test_an_object_scan_needs_no_open_exposure(make_scan: Callable[..., Scan]) -> None:
    check = check_scan(make_scan(opens=0, wedge=False, objects=3))
    assert check.causes == ()
    assert check.verdict is Verdict.EXCEPTIONS
    assert "no open exposure: the tube's output will be taken as it was" in said(check)


def per_bin(scan: Scan) -> Scan:
    """The scan with what was counted in bins where counts above thresholds belong."""
    counts = counts_of(scan)
    counts[:, :-1] -= counts[:, 1:]
    return scan.with_counts(counts)


@pytest.mark.parametrize("loss", [0.0, 0.4])
def test_counts_per_bin_share_no_pulses(
    make_scan: Callable[..., Scan], loss: float
) -> None:
    scan = make_scan(pixels=(12, 16), loss=loss)
    sound = np.ones((12, 16), bool)
    above, alone = shared_pulses(scan, sound), shared_pulses(per_bin(scan), sound)
    assert above is not None
    assert above.share == pytest.approx(1.0, abs=5 * above.standard_error)
    assert not above.none
    assert alone is not None
    assert alone.share == pytest.approx(0.0, abs=5 * alone.standard_error)
    assert alone.none
    check = check_scan(per_bin(scan))
    assert check.verdict is Verdict.NOT_FIT
    assert (
        "the repeats 2, 3, 15, 16 show that neighbouring thresholds share"
        in (check.causes[0])
    )
    assert "these are counts per bin, or thresholds exposed one" in check.causes[0]


def test_counts_per_bin_without_repeats_rise(make_scan: Callable[..., Scan]) -> None:
    scan = replace(make_scan(pixels=(12, 16)), current_ma=np.linspace(3.0, 3.5, 17))
    bins = counts_of(per_bin(scan))
    bins[scan.exposures("open")] += np.array([9999, 6666, 3333, 0], np.uint32)[
        :, None, None
    ]
    assert shared_pulses(scan, np.ones((12, 16), bool)) is None
    check = check_scan(scan.with_counts(bins))
    assert check.verdict is Verdict.NOT_FIT
    assert "in 11 of 15 exposures with a beam many pixels count more" in said(check)
    assert "are these counts per bin? Store the counts above" in said(check)


def test_averaged_images_are_no_counts(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(wedge=False, opens=9)
    counts = counts_of(scan)
    beam = scan.role.count("dark")
    smooth = np.stack([counts[beam:].mean(0) + 3 * (i % 2) for i in range(9)])
    counts[beam:] = np.rint(smooth)
    check = check_scan(scan.with_counts(counts))
    assert check.verdict is Verdict.NOT_FIT
    assert "smoothed or averaged images, not counts" in said(check)


def test_too_much_scatter_is_said(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(wedge=False, opens=6)
    counts = counts_of(scan)
    rng = np.random.default_rng(2)
    beam = scan.role.count("dark")
    counts[beam:] = np.rint(
        counts[beam:] + rng.normal(0, np.sqrt(0.5 * counts[beam:]))
    ).clip(0)
    check = check_scan(scan.with_counts(counts))
    assert "times the Poisson variance, 1.00 is expected" in said(check)
    assert check.dispersions[0].ratio[0] == pytest.approx(1.5, abs=0.1)
    assert check.bad_pixels < 10


def test_what_else_there_is_to_mind(make_scan: Callable[..., Scan]) -> None:
    drifting = check_scan(make_scan(drift=0.04, wedge=False, opens=6))
    assert "from the first to the last open exposure" in said(drifting)
    assert drifting.thresholds[0].drift == pytest.approx(0.04, abs=0.01)
    bare = check_scan(make_scan(darks=0, opens=1))
    assert "there is no dark exposure" in said(bare)
    assert "one open exposure only" in said(bare)
    assert "the dead time is not measured" in said(bare)
    slow = check_scan(make_scan(loss=0.3))
    assert "of the pulses are lost in the open beam" in said(slow)
    scan = make_scan()
    counts = counts_of(scan)
    counts[:2] += (
        np.random.default_rng(5).poisson(40.0, counts[:2].shape).astype(np.uint32)
    )
    dark = check_scan(scan.with_counts(counts))
    assert re.search(r"sound pixels count (79|80)\.?\d* /s in the dark", said(dark))
    assert not dark.reasons.any()


def test_bad_pixels_are_counted_by_reason(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan()
    counts = counts_of(scan)
    counts[:, :, 3, 3] = 0
    counts[:, :, 9, 9] = 777
    check = check_scan(scan.with_counts(counts))
    assert check.reasons[3, 3] == PixelReason.DEAD
    assert check.bad_pixels >= 2
    assert check.pixels_by_reason["DEAD"] == 1
    assert check.pixels_by_reason["STUCK"] == 1
    assert "1 dead, 1 stuck" in check_text(check)


def test_an_objects_repeats_show_unstable_pixels(
    make_scan: Callable[..., Scan],
) -> None:
    scan = make_scan(wedge=False, opens=2, objects=8)
    counts = counts_of(scan)
    first = scan.role.index("object")
    counts[first + 3, :, 5, 5] //= 2
    counts[first:, :, 10:14, 10:14] = (
        counts[first:, :, 10:14, 10:14] * np.linspace(1, 0.5, 8)[:, None, None, None]
    )
    check = check_scan(scan.with_counts(counts))
    assert check.reasons[5, 5] == PixelReason.UNSTABLE
    # where something moves, no pixel is blamed
    assert not check.reasons[11:13, 11:13].any()


def test_dead_time_from_two_currents(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(loss=0.15)
    loss = counting_loss(scan, np.ones(scan.shape[2:], bool))
    assert loss is not None
    # 20 000 pulses in 0.5 s, 15 % of a pulse distance
    assert loss.median_ns == pytest.approx(0.15 * 0.5 / 20_000 * 1e9, rel=0.05)
    assert loss.loss == pytest.approx(1 - np.exp(-0.15), abs=0.01)
    assert loss.dead_time_ns.shape == scan.shape[2:]
    assert counting_loss(replace(scan, current_ma=None), loss.dead_time_ns > 0) is None
    nothing = np.zeros(scan.shape[2:], bool)
    assert counting_loss(scan, nothing) is None
    steady = make_scan(opens=2)
    assert counting_loss(steady, ~nothing) is None


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_a_loss_and_its_dead_time_agree(
    make_scan: Callable[..., Scan], seed: int
) -> None:
    scan = make_scan(seed=seed, pixels=(12, 16), open_counts=2_000.0)
    check = check_scan(scan)
    loss = check.loss
    assert loss is not None
    lost = np.expm1(loss.median_ns * 1e-9 * loss.highest_rate_per_s / (1.0 - loss.loss))
    assert loss.loss == pytest.approx(max(lost / (1.0 + lost), 0.0), abs=1e-12)
    text = check_text(check)
    if loss.median_ns <= 2.0 * loss.standard_error_ns:
        assert "no loss to be seen up to" in text
        assert "of the pulses lost" not in text
    text = check_text(check_scan(make_scan(seed=seed, pixels=(12, 16), loss=0.1)))
    assert re.search(r"dead time: \d+ \+- \d+ ns, \d+\.\d% of the pulses lost at", text)


def test_an_unsteady_tube_widens_the_dead_times_error(
    make_scan: Callable[..., Scan],
) -> None:
    scan = make_scan(loss=0.1, pixels=(20, 20))
    everything = np.ones((20, 20), bool)
    steady = counting_loss(scan, everything)
    brighter = np.ones(scan.shape[0])
    brighter[[HALF, OPEN]] = 1.02
    counts = np.rint(counts_of(scan) * brighter[:, None, None, None]).astype(np.uint32)
    unsteady = counting_loss(scan.with_counts(counts), everything)
    assert steady is not None
    assert unsteady is not None
    assert unsteady.standard_error_ns > 3 * steady.standard_error_ns


def test_dispersion_of_counts_is_one(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(wedge=False, opens=8, pixels=(60, 60))
    (found,) = dispersions(scan, np.ones((60, 60), bool))
    assert found.exposures == tuple(range(2, 10))
    pull = (found.ratio - 1.0) / found.standard_error
    assert np.all(np.abs(pull) < 4)
    assert np.allclose(found.outside, 0.05, atol=0.015)


def test_few_counts_have_no_dispersion(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(wedge=False, opens=3, open_counts=12.0)
    (found,) = dispersions(scan, np.ones(scan.shape[2:], bool))
    assert np.isnan(found.ratio[-1])
    assert np.isfinite(found.ratio[0])


def test_expected_ratio_without_dead_time() -> None:
    assert expected_ratio(np.array([900.0, 300.0]), 1.0, -5.0).tolist() == [1.0, 1.0]


def test_text_fits_one_screen_and_the_summary_is_json(
    make_scan: Callable[..., Scan],
) -> None:
    scan = make_scan()
    thickness = scan.thickness_mm.copy()
    counts = counts_of(scan)
    counts[:, :, 3, 3] = 0
    for i in range(4, 15):
        counts[i, :, :2, 3 * i - 10 : 3 * i - 7] = NOT_A_COUNT
        counts[i, :, 8, :10] = NOT_A_COUNT
        counts[i, :, 9 + i, :20] = NOT_A_COUNT
    check = check_scan(
        replace(scan.with_counts(counts), thickness_mm=thickness, notes=("a note",))
    )
    lines = check_text(check).splitlines()
    assert len(lines) <= 40
    assert "and 3 more" in lines
    assert "  a note" in lines
    summary = json.loads(json.dumps(check_summary(check), allow_nan=False))
    assert summary["verdict"] == check.verdict.value
    assert summary["thresholds"][0]["threshold_kev"] == 20.0
    assert {p["kind"] for p in summary["problems"]} >= {"not counts"}
    bare = check_summary(check_scan(make_scan(opens=1, darks=0, wedge=False)))
    assert bare["dead_time"] is None
    assert bare["thresholds"][0]["dark_rate_per_s"] is None
    assert json.dumps(bare, allow_nan=False)
