"""Bad pixels: all kinds are found, with their reasons, and sound ones are left."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from spectral.scans.bad_lines import line_stretches
from spectral.scans.bad_pixels import REASON_MEANING, PixelReason, find_bad_pixels
from spectral.scans.pixel_series import scatter, too_scattered
from spectral.scans.repeats import setting_numbers, settings_with_repeats
from spectral.scans.stored_counts import NOT_A_COUNT

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

SETTINGS: list[dict[str, Any]] = [
    {},
    {"open_counts": 300.0},
    {"loss": 0.2},
    {"drift": 0.05},
    {"wedge": False, "opens": 2, "darks": 1, "objects": 3},
    {"opens": 1},
    {"opens": 0},
    {"darks": 0},
]


@pytest.mark.parametrize("setting", SETTINGS)
def test_sound_pixels_are_left_alone(
    make_scan: Callable[..., Scan], setting: dict[str, Any]
) -> None:
    # three thousand pixels, each of a few tests failing by chance once in 10 000
    scan = make_scan(pixels=(50, 60), **setting)
    assert np.count_nonzero(find_bad_pixels(scan)) <= 4


def spoilt(scan: Scan, seed: int = 9) -> tuple[Scan, NDArray[np.uint16]]:
    """The scan with pixels of every kind gone bad, and what they are."""
    rng = np.random.default_rng(seed)
    counts = scan.counts.read(range(scan.shape[0])).astype(np.int64)
    n, _, y, x = counts.shape
    truth = np.zeros((y, x), np.uint16)
    beam = [i for i, role in enumerate(scan.role) if role != "dark"]
    places = [(r, c) for r in range(2, y, 4) for c in range(2, x - 6, 5)]
    rng.shuffle(places)
    for r, c in places[:6]:
        counts[:, :, r, c] = 0
        truth[r, c] = PixelReason.DEAD
    for r, c in places[6:10]:
        counts[:, :, r, c] = rng.integers(1, 60_000)
        truth[r, c] = PixelReason.STUCK
    for r, c in places[10:16]:
        extra = rng.poisson(40.0 + rng.exponential(500.0), n)
        counts[:, 0, r, c] += extra
        counts[:, 1, r, c] += extra // 9
        truth[r, c] = PixelReason.NOISY
    for r, c in places[16:22]:
        flips = rng.random(len(beam)) < 0.5
        flips[:2] = [True, False]
        for i in np.array(beam)[flips]:
            counts[i, :, r, c] = rng.binomial(counts[i, :, r, c], 0.6)
        truth[r, c] = PixelReason.UNSTABLE
    column, rows = x - 3, slice(y // 3, y - 1)
    for i in beam:
        counts[i, :, rows, column] = rng.binomial(
            counts[i, :, rows, column], rng.uniform(0.4, 0.8)
        )
    truth[rows, column] = PixelReason.PARTIAL_COLUMN
    return scan.with_counts(counts.astype(np.uint32)), truth


@pytest.mark.parametrize(
    "setting", [{}, {"open_counts": 2000.0}, {"loss": 0.2, "drift": 0.03}]
)
def test_every_kind_is_found(
    make_scan: Callable[..., Scan], setting: dict[str, Any]
) -> None:
    scan, truth = spoilt(make_scan(**setting))
    reasons = find_bad_pixels(scan)
    for kind in (
        PixelReason.DEAD,
        PixelReason.STUCK,
        PixelReason.NOISY,
        PixelReason.UNSTABLE,
        PixelReason.PARTIAL_COLUMN,
    ):
        here = truth == kind
        assert (reasons[here] & kind != 0).all(), kind
    assert np.count_nonzero(reasons[truth == 0]) <= 3


def test_an_object_scan_shows_what_two_opens_can(
    make_scan: Callable[..., Scan],
) -> None:
    scan, truth = spoilt(make_scan(wedge=False, opens=2, darks=1, objects=2))
    reasons = find_bad_pixels(scan)
    certain = truth & ~np.uint16(PixelReason.UNSTABLE | PixelReason.PARTIAL_COLUMN)
    assert (reasons[certain != 0] != 0).all()
    assert np.count_nonzero(reasons[truth == 0]) <= 3


def test_a_flicker_shared_by_few_makes_no_rule(
    make_scan: Callable[..., Scan],
) -> None:
    # 1.5 % of the pixels flicker together: they may not pass for the population
    scan = make_scan(opens=6)
    counts = scan.counts.read(range(scan.shape[0])).astype(np.float64)
    gain = np.random.default_rng(4).normal(1.0, 0.05, len(counts))
    counts[:, :, 5:24, 30] *= gain[:, None, None]
    reasons = find_bad_pixels(scan.with_counts(np.rint(counts).astype(np.uint32)))
    assert (reasons[5:24, 30] & PixelReason.UNSTABLE).all()


def test_masked_odd_and_faulty_pixels(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan()
    counts = scan.counts.read(range(scan.shape[0])).copy()
    counts[:, :, 4, 4] //= 3
    counts[:, :, :, 11] = counts[:, :, :, 11] * 3 // 2
    counts[3:9, 1, 6, 6] = NOT_A_COUNT
    counts[5, 2, 8, 8] = NOT_A_COUNT
    mask = np.zeros(scan.shape[2:], np.uint32)
    mask[1, 2] = 1 << 8
    reasons = find_bad_pixels(replace(scan.with_counts(counts), pixel_mask=mask))
    assert reasons[1, 2] == PixelReason.MASKED
    assert reasons[4, 4] == PixelReason.ODD_RESPONSE
    assert reasons[6, 6] == PixelReason.COUNT_FAULT
    # a single fault belongs to its exposure, and a whole wider column is no fault
    assert reasons[8, 8] == 0
    assert np.count_nonzero(reasons[:, 11]) <= 1


def test_a_scan_of_objects_only_tells_nothing(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(wedge=False, opens=0, darks=0, objects=2)
    assert not find_bad_pixels(scan).any()


def test_scatter_follows_the_chi_square_law() -> None:
    # the law is exact for repeats of one setting: 5 % fail a test made for 5 %
    rng = np.random.default_rng(6)
    counts = rng.poisson(400.0, (6, 20_000))
    everything = np.ones(20_000, bool)
    valid = np.ones(counts.shape, bool)
    chi_square, degrees = scatter(counts, valid, everything, np.zeros(6, np.int64))
    assert degrees == 5
    assert abs(chi_square.mean() / degrees - 1) < 0.03
    failed = too_scattered(chi_square, degrees, everything, chance=0.05)
    assert abs(failed.mean() - 0.05) < 0.008


def test_a_series_too_short_says_nothing() -> None:
    counts = np.full((1, 10), 500)
    all_of_them = np.ones(10, bool)
    chi_square, degrees = scatter(
        counts, np.ones((1, 10), bool), all_of_them, np.zeros(1, np.int64)
    )
    assert degrees == 0
    assert not too_scattered(chi_square, 0, all_of_them, chance=0.1).any()
    two = np.full((2, 10), 500)
    _, degrees = scatter(two, np.ones((2, 10), bool), all_of_them, np.array([0, 1]))
    assert degrees == 0


def test_repeats_are_known_by_their_setting(make_scan: Callable[..., Scan]) -> None:
    scan = make_scan(objects=2)
    # 2 dark, then half current, full, 11 steps, full, half current, 2 objects
    numbers = setting_numbers(scan, range(scan.shape[0]))
    assert numbers[0] == numbers[1]
    assert numbers[2] == numbers[16] != numbers[3]
    assert len(set(numbers[4:15])) == 11
    groups = settings_with_repeats(scan, "open", "object")
    assert sorted(g.tolist() for g in groups) == [[2, 16], [3, 15], [17, 18]]
    turned = replace(scan, rotation_angle_deg=np.arange(0.0, scan.shape[0]))
    assert settings_with_repeats(turned, "object") == []
    unsaid = replace(scan, current_ma=None)
    assert [len(g) for g in settings_with_repeats(unsaid, "open")] == [4]


def test_scattered_failures_are_no_stretch() -> None:
    rng = np.random.default_rng(8)
    failing = rng.random((200, 300)) < 0.01
    assert np.count_nonzero(line_stretches(failing)) <= 4
    failing[40:80, 100] = rng.random(40) < 0.8
    found = line_stretches(failing)
    assert found[44:76, 100].all()
    row = np.zeros((20, 30), bool)
    row[3, 5:25] = True
    assert np.array_equal(line_stretches(row), row)
    assert not line_stretches(np.zeros((4, 5), bool)).any()


def test_each_reason_has_a_meaning() -> None:
    assert set(REASON_MEANING) == set(PixelReason)
