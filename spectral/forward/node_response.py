"""Node weights of every pixel: the form in which a response reaches the solver."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.forward.nodes import (
    NodeBasis,
    choose_nodes,
    domain_points,
    pair_candidates,
)
from spectral.forward.pixel_response import (
    CurveTables,
    PixelDepartures,
    curve_tables,
    expected_above,
    read_pixels,
)

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.forward.counting_model import CountingModel

NODE_COUNTS = (8, 12, 16, 20, 24)
TOLERANCE = 5e-5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NodeTables:
    """Node weights against threshold, for one photon rate.

    Attributes
    ----------
    attenuation : array, shape (node, material), in cm2/g
    by_bin : tuple of CurveTables, one a bin, each of shape (node, grid)
        Counts above a level per second, with the bin's own residual factor.
    error : float
        Largest relative error of a bin's counts against the full model, checked at
        points of the domain that did not choose the nodes.
    """

    attenuation: NDArray[np.float64]
    by_bin: tuple[CurveTables, ...]
    error: float


def node_tables(
    model: CountingModel,
    levels_kev: NDArray[np.float64],
    largest: NDArray[np.float64],
    photon_rate: float,
    *,
    log_factor: Callable[[NDArray[np.float64]], NDArray[np.float64]] | None = None,
    tolerance: float = TOLERANCE,
) -> NodeTables:
    """Reduce a counting model to nodes at one photon rate.

    Parameters
    ----------
    model : CountingModel
    levels_kev : array, shape (threshold,), in keV
    largest : array, shape (material,), in g/cm2
        Domain that the nodes must serve.
    photon_rate : float, in 1/s
    log_factor : callable, optional
        Areal densities (case, material) to the logarithm of a factor on each bin
        (case, bin): the calibration's residual correction.
    tolerance : float
        The smallest number of nodes whose checked error is below this is taken,
        or the largest number tried.
    """
    points = domain_points(largest)
    tables = curve_tables(model, points, photon_rate)
    average = PixelDepartures(values=np.zeros((1, levels_kev.size + 3)))
    checks = (
        0.5
        * largest
        * (1.0 + np.random.default_rng(1).uniform(-1, 1, (200, largest.size)))
    )
    factor = np.zeros((points.shape[0], levels_kev.size))
    check_factor = np.zeros((checks.shape[0], levels_kev.size))
    if log_factor is not None:
        factor, check_factor = log_factor(points), log_factor(checks)

    def bins(of: CurveTables, by: NDArray[np.float64]) -> NDArray[np.float64]:
        above, _ = expected_above(of, levels_kev, average)
        return counts_to_bins(above[0]) * np.exp(by)

    targets = bins(tables, factor)
    usable = targets.min(axis=0) > 0.0
    truth = bins(curve_tables(model, checks, photon_rate), check_factor)
    candidates = pair_candidates(model.attenuation)
    basis: NodeBasis | None = None
    error = np.inf
    for count in NODE_COUNTS:
        basis = choose_nodes(candidates, points, targets[:, usable], count=count)
        found = basis.expected(basis.weights(targets), checks)
        error = float(np.abs(found / truth - 1.0)[:, usable].max())
        if error < tolerance:
            break
    if basis is None:  # NODE_COUNTS is never empty
        raise AssertionError
    by_bin = tuple(
        _projected(basis, tables.scaled(np.exp(factor[:, b])))
        for b in range(levels_kev.size)
    )
    return NodeTables(attenuation=basis.attenuation, by_bin=by_bin, error=error)


def _projected(basis: NodeBasis, tables: CurveTables) -> CurveTables:
    return CurveTables(
        curve=basis.weights(tables.curve),
        by_rate=basis.weights(tables.by_rate),
        by_variance=basis.weights(tables.by_variance),
        by_dead_time=basis.weights(tables.by_dead_time),
        step_kev=tables.step_kev,
    )


def pixel_weights(
    tables: NodeTables,
    levels_kev: NDArray[np.float64],
    pixels: PixelDepartures,
    *,
    derivatives: bool = False,
) -> tuple[NDArray[np.float64], NDArray[np.float64] | None]:
    """Node weights of pixels, in counts per second.

    Parameters
    ----------
    tables : NodeTables
    levels_kev : array, shape (threshold,), in keV
    pixels : PixelDepartures
    derivatives : bool
        Also give the change with each departure.

    Returns
    -------
    weight : array, shape (pixel, bin, node)
    change : array, shape (pixel, bin, parameter, node), or None
    """
    bins = levels_kev.size
    count = pixels.values.shape[0]
    nodes = tables.attenuation.shape[0]
    weight = np.empty((count, bins, nodes))
    change = np.zeros((count, bins, bins + 3, nodes)) if derivatives else None
    for b in range(bins):
        pair = slice(b, min(b + 2, bins))
        above, slope = read_pixels(
            tables.by_bin[b], levels_kev, pixels, thresholds=pair
        )
        weight[:, b] = above[:, :, 0] - (above[:, :, 1] if b + 1 < bins else 0.0)
        if change is None:
            continue
        for position, k in enumerate(range(pair.start, pair.stop)):
            sign = 1.0 if position == 0 else -1.0
            change[:, b, 0] += sign * slope[:, :, position, 0]
            change[:, b, 1 + k] += sign * slope[:, :, position, 1]
            change[:, b, -2] += sign * slope[:, :, position, 2]
            change[:, b, -1] += sign * slope[:, :, position, 3]
    return weight, change
