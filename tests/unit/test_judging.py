"""Flags: where the calibrated domain ends, how poor a fit may be, and what is said."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.decomposition.judging import (
    LEAST_COUNTS,
    domain_facets,
    judge,
    misfit_limit,
    rate_share,
    sigmas_outside,
)
from spectral.scans.flags import MEANING, PixelFlag

if TYPE_CHECKING:
    from collections.abc import Sequence

BOX = np.array([[0.0, 0.0], [8.0, 0.0], [0.0, 2.0], [8.0, 2.0], [4.0, 1.0]])
TRIANGLE = np.array([[0.0, 0.0], [4.0, 0.0], [0.0, 3.0]])


def inside(facets: np.ndarray, points: Sequence[tuple[float, ...]]) -> list[bool]:
    beyond = np.array(points) @ facets[:, :-1].T + facets[:, -1]
    return [bool(b) for b in (beyond <= 1e-9).all(axis=1)]


def test_box_has_four_facets_at_its_sides() -> None:
    facets = domain_facets(BOX)
    sides = {tuple(np.round(f, 9) + 0.0) for f in facets}
    assert sides == {(-1, 0, 0), (0, -1, 0), (1, 0, -8), (0, 1, -2)}


def test_triangle_has_its_slope_as_a_facet() -> None:
    facets = domain_facets(TRIANGLE)
    assert facets.shape == (3, 3)
    # 3x + 4y = 12: normal (0.6, 0.8), 2.4 from the origin
    assert any(np.allclose(f, [0.6, 0.8, -2.4]) for f in facets)
    assert inside(facets, [(1.0, 1.0), (2.0, 1.6), (3.9, 0.0)]) == [True, False, True]


def test_normals_have_unit_length_whatever_the_scales() -> None:
    rng = np.random.default_rng(1)
    steps = rng.uniform(0.0, 1.0, (30, 3)) * [20.0, 1.0, 0.01]
    facets = domain_facets(steps)
    np.testing.assert_allclose(np.linalg.norm(facets[:, :-1], axis=1), 1.0)
    assert all(inside(facets, [tuple(s) for s in steps]))
    assert not any(inside(facets, [(21.0, 0.5, 0.005), (5.0, 0.5, -0.001)]))


@pytest.mark.parametrize(
    "steps",
    [
        np.array([[0.0, 0.0], [1.0, 2.0], [2.0, 4.0]]),
        np.array([[0.0, 0.0], [2.0, 4.0]]),
    ],
    ids=["on a line", "two"],
)
def test_steps_that_span_no_area_give_their_box(steps: np.ndarray) -> None:
    facets = domain_facets(steps)
    points = [(1.0, 1.0), (2.0, 4.0), (2.1, 1.0), (1.0, -0.1)]
    assert inside(facets, points) == [True, True, False, False]


def test_one_material_has_two_ends() -> None:
    facets = domain_facets(np.array([[0.0], [1.0], [5.0]]))
    assert inside(facets, [(0.0,), (5.0,), (5.1,), (-0.1,)]) == [
        True,
        True,
        False,
        False,
    ]


def test_distance_outside_is_in_standard_errors() -> None:
    facets = domain_facets(BOX)
    covariance = np.array([[0.25, 0.0], [0.0, 0.01]])
    estimate = np.array([[9.0, 1.0], [4.0, 2.3], [4.0, 1.0], [-1.5, 1.0], [9.0, 2.3]])
    found = sigmas_outside(estimate, np.tile(covariance, (5, 1, 1)), facets)
    # 1/0.5, 0.3/0.1, inside, 1.5/0.5, the larger of two
    np.testing.assert_allclose(found, [2.0, 3.0, -np.inf, 3.0, 3.0], atol=1e-6)


def test_correlated_errors_are_taken_across_the_facet() -> None:
    # sd along (0.6, 0.8): sqrt(0.36 a + 0.64 b + 0.96 c)
    a, b, c = 0.04, 0.09, -0.05
    covariance = np.array([[[a, c], [c, b]]])
    estimate = np.array([[4.0, 3.0]])
    found = sigmas_outside(estimate, covariance, domain_facets(TRIANGLE))
    sd = np.sqrt(0.36 * a + 0.64 * b + 0.96 * c)
    assert found[0] == pytest.approx((0.6 * 4 + 0.8 * 3 - 2.4) / sd)


def test_lost_estimate_is_not_called_outside() -> None:
    found = sigmas_outside(
        np.full((1, 2), np.nan), np.full((1, 2, 2), np.nan), domain_facets(BOX)
    )
    assert not found[0] > 0.0


@pytest.mark.parametrize(
    ("freedom", "limit"),
    # upper 1e-5 points of chi-square: 19.51 at 1, 23.03 at 2 (= 2 ln 1e5), 25.90 at 3
    # degrees of freedom (tables of the distribution, from memory)
    [(1, 19.51), (2, 23.03), (3, 25.90)],
)
def test_misfit_limit_is_the_tail_of_chi_square(freedom: int, limit: float) -> None:
    found = misfit_limit(freedom, np.array([0.0, 0.5]))
    assert found[0] * freedom == pytest.approx(limit, abs=0.01)
    assert found[1] == pytest.approx(1.5 * found[0])


@pytest.mark.slow
def test_misfit_limit_is_rarely_passed_by_good_pixels() -> None:
    rng = np.random.default_rng(2)
    limit = misfit_limit(3, np.zeros(1))[0]
    passed = int((rng.chisquare(3, 2_000_000) / 3 > limit).sum())
    # 20 expected
    assert 4 <= passed <= 44


def test_as_many_bins_as_materials_cannot_misfit() -> None:
    assert np.all(np.isinf(misfit_limit(0, np.zeros(3))))


def judged(**changed: float | bool) -> int:
    """Flags of one sound pixel with some of its facts changed."""
    facts: dict[str, float | bool] = {
        "total_counts": 1000.0,
        "outside": -1.0,
        "deviance": 1.0,
        "limit": 9.0,
        "converged": True,
        "over_rate": 0.5,
    }
    facts |= changed
    return int(judge(**{k: np.array([v]) for k, v in facts.items()})[0])


def test_each_doubt_has_its_flag() -> None:
    assert judged() == PixelFlag.GOOD
    assert judged(total_counts=LEAST_COUNTS - 1) == PixelFlag.FEW_COUNTS
    assert judged(total_counts=LEAST_COUNTS) == PixelFlag.GOOD
    assert judged(outside=4.1) == PixelFlag.OUTSIDE_DOMAIN
    assert judged(outside=3.9) == PixelFlag.GOOD
    assert judged(deviance=9.1) == PixelFlag.MISFIT
    assert judged(converged=False) == PixelFlag.NOT_CONVERGED
    assert judged(over_rate=1.06) == PixelFlag.RATE_TOO_HIGH
    assert judged(over_rate=1.04) == PixelFlag.GOOD


def test_doubts_add_up() -> None:
    both = judged(outside=10.0, deviance=100.0)
    assert both == PixelFlag.OUTSIDE_DOMAIN | PixelFlag.MISFIT


def test_every_flag_has_a_meaning() -> None:
    assert set(MEANING) == {flag for flag in PixelFlag if flag}


def test_counting_scatter_does_not_count_as_rate() -> None:
    limit = np.array([400.0, 40000.0])
    # 5 sigma of 400 counts is 100, of 40000 it is 1000
    found = rate_share(np.array([500.0, 45000.0]), limit)
    np.testing.assert_allclose(found, [1.0, 1.1])
