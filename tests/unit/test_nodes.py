"""Reduced energy nodes: their choice, their error, and what lies beyond the domain."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.forward.counting_model import CountingModel, counts_to_bins
from spectral.forward.node_response import NodeTables, node_tables, pixel_weights
from spectral.forward.nodes import (
    NodeBasis,
    choose_nodes,
    domain_points,
    pair_candidates,
)
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

LEVELS_KEV = np.array([20.0, 32.0, 45.0, 60.0])
LARGEST = np.array([9.0, 3.0])


RATES = {"no pile-up": 1e3, "some": 3e5, "strong": 2e6}


@pytest.fixture(scope="module", params=RATES)
def tables(
    counting_model: CountingModel, request: pytest.FixtureRequest
) -> tuple[float, NodeTables]:
    rate = RATES[request.param]
    return rate, node_tables(counting_model, LEVELS_KEV, LARGEST, rate)


def average(count: int = 1) -> PixelDepartures:
    return PixelDepartures(values=np.zeros((count, LEVELS_KEV.size + 3)))


def by_nodes(tables: NodeTables, areal: NDArray[np.float64]) -> NDArray[np.float64]:
    """Bin counts per second of the average pixel, shape (case, bin)."""
    weight, _ = pixel_weights(tables, LEVELS_KEV, average())
    return np.asarray(np.exp(-areal @ tables.attenuation.T) @ weight[0].T)


def by_model(
    counting_model: CountingModel, rate: float, areal: NDArray[np.float64]
) -> NDArray[np.float64]:
    above, _ = expected_above(
        curve_tables(counting_model, areal, rate), LEVELS_KEV, average()
    )
    return np.asarray(counts_to_bins(above[0]))


def test_error_at_fresh_points_is_within_the_promise(
    counting_model: CountingModel,
    tables: tuple[float, NodeTables],
) -> None:
    rate, reduced = tables
    fresh = np.random.default_rng(99).uniform(0.0, 1.0, (400, 2)) * LARGEST
    found, truth = by_nodes(reduced, fresh), by_model(counting_model, rate, fresh)
    # 1e-4: twice the tolerance, for points that nobody chose nodes or count by
    assert np.abs(found / truth - 1.0).max() < 1e-4
    assert reduced.error < 1e-4


def test_few_nodes_do_without_pile_up_and_more_are_taken_with_it(
    counting_model: CountingModel,
) -> None:
    still = node_tables(counting_model, LEVELS_KEV, LARGEST, 1e3)
    busy = node_tables(counting_model, LEVELS_KEV, LARGEST, 2e6)
    assert still.attenuation.shape[0] <= 12
    assert busy.attenuation.shape[0] > still.attenuation.shape[0]
    assert len(busy.by_bin) == LEVELS_KEV.size


def test_counts_beyond_the_domain_stay_positive_and_near(
    counting_model: CountingModel,
    tables: tuple[float, NodeTables],
) -> None:
    # the solver steps there: no count may turn negative or run away. Towards more
    # material that holds far out; towards less than none the light comes back that
    # the filter took, which nobody calibrated, so only a tenth is asked for
    rate, reduced = tables
    outside = np.array(
        [[-0.1, -0.1], [-0.1, 0.5], [1.4, 0.2], [0.2, 1.4], [1.4, 1.4], [1.4, -0.1]]
    )
    found, truth = (
        by_nodes(reduced, outside * LARGEST),
        by_model(counting_model, rate, outside * LARGEST),
    )
    np.testing.assert_allclose(found, truth, rtol=0.02)
    far = np.array([[3.0, 0.0], [0.0, 3.0], [2.0, 2.0], [3.0, 3.0]]) * LARGEST
    ratio = by_nodes(reduced, far) / by_model(counting_model, rate, far)
    np.testing.assert_allclose(ratio, 1.0, atol=0.2)


def test_every_pixels_own_response_is_met_by_the_nodes(
    counting_model: CountingModel,
    tables: tuple[float, NodeTables],
) -> None:
    rate, reduced = tables
    rng = np.random.default_rng(3)
    scale = np.array([0.03, 0.8, 0.8, 0.8, 0.8, 0.5, 0.05])
    pixels = PixelDepartures(values=rng.normal(0.0, 1.0, (20, 7)) * scale)
    areal = rng.uniform(0.0, 1.0, (30, 2)) * LARGEST
    above, _ = expected_above(
        curve_tables(counting_model, areal, rate), LEVELS_KEV, pixels
    )
    weight, _ = pixel_weights(reduced, LEVELS_KEV, pixels)
    found = np.einsum("pbn,cn->pcb", weight, np.exp(-areal @ reduced.attenuation.T))
    # thresholds that moved by a keV were not among those that chose the nodes
    np.testing.assert_allclose(found, counts_to_bins(above), rtol=3e-4)


def test_residual_factor_reaches_the_nodes(counting_model: CountingModel) -> None:
    def factor(areal: NDArray[np.float64]) -> NDArray[np.float64]:
        bend = 0.01 * np.exp(-areal[:, :1] / 5.0)
        return np.asarray(bend * np.array([1.0, -1.0, 0.5, 0.0]))

    rate = 3e5
    with_factor = node_tables(
        counting_model, LEVELS_KEV, LARGEST, rate, log_factor=factor
    )
    areal = np.random.default_rng(5).uniform(0.0, 1.0, (50, 2)) * LARGEST
    expected = by_model(counting_model, rate, areal) * np.exp(factor(areal))
    np.testing.assert_allclose(by_nodes(with_factor, areal), expected, rtol=2e-4)


def test_loose_tolerance_takes_fewer_nodes(counting_model: CountingModel) -> None:
    loose = node_tables(counting_model, LEVELS_KEV, LARGEST, 2e6, tolerance=0.05)
    assert loose.attenuation.shape[0] == 8
    assert loose.error < 0.05


def test_sums_of_candidates_are_met_exactly() -> None:
    # two exponentials with positive weights: the nodes find both
    attenuation = np.linspace(0.1, 2.0, 30)[:, None] * np.array([[1.0, 2.0]])
    points = domain_points(np.array([2.0, 1.0]))
    passed = np.exp(-points @ attenuation.T)
    target = (3.0 * passed[:, 4] + 0.5 * passed[:, 20])[:, None]
    basis = choose_nodes(attenuation, points, target, count=4)
    fresh = np.random.default_rng(1).uniform(0.0, 1.0, (40, 2)) * [2.0, 1.0]
    found = basis.expected(basis.weights(target), fresh)[:, 0]
    both = np.exp(-fresh @ attenuation[[4, 20]].T) @ [3.0, 0.5]
    np.testing.assert_allclose(found, both, rtol=1e-7)


def test_domain_points_cover_the_domain_and_a_margin() -> None:
    points = domain_points(np.array([10.0, 2.0]), margin=0.2)
    assert points.shape == (196, 2)
    assert np.all(points.min(axis=0) < 0.0)
    assert np.all(points.min(axis=0) > -0.05 * np.array([10.0, 2.0]))
    assert np.all(points.max(axis=0) > 1.18 * np.array([10.0, 2.0]))
    assert domain_points(np.ones(1)).shape == (40, 1)
    assert domain_points(np.ones(3)).shape == (512, 3)


def test_domain_without_extent_is_refused() -> None:
    with pytest.raises(InputError, match="positive largest areal density"):
        domain_points(np.array([1.0, 0.0]))


def test_curve_of_zero_is_refused() -> None:
    points = domain_points(np.array([1.0]))
    with pytest.raises(InputError, match="needs positive targets"):
        choose_nodes(np.ones((3, 1)), points, np.zeros((points.shape[0], 1)))


def test_curve_at_the_wrong_points_is_refused() -> None:
    basis = NodeBasis(
        attenuation=np.ones((2, 1)), points=np.ones((5, 1)), projection=np.ones((2, 5))
    )
    with pytest.raises(InputError, match="the curve has 4 values, the basis needs 5"):
        basis.weights(np.ones((4, 3)))


def test_candidates_are_single_photons_and_sums_of_two_and_three() -> None:
    attenuation = np.array([np.linspace(2.0, 0.2, 80)])
    found = pair_candidates(attenuation, singles=40, pairs=12, triples=6)[:, 0]
    # 40, 12 over 2 with repeats, 6 over 3 with repeats
    assert found.size == 40 + 78 + 56
    assert found[:40].max() == pytest.approx(2.0)
    assert found[40:118].max() == pytest.approx(4.0)
    assert found[118:].max() == pytest.approx(6.0)
