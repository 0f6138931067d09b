"""Responses of pixels at one exposure's conditions, ready for the solver."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.decomposition.likelihood import dead_fraction
from spectral.kernels import calibration_shift
from spectral.kernels.node_weights import node_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.forward.node_response import NodeTables

NS = 1e-9
BLOCK = 8192


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Responses:
    """Expected counts of pixels as sums over nodes, for one count time.

    Attributes
    ----------
    flat : array of int64, shape (pixel,)
        Flat indices of the pixels.
    weight : array of float64 or float32, shape (pixel, bin, node)
        Counts of each node without an object.
    attenuation : array, shape (node, material), in cm2/g
    lost_fraction : float
        c in the counts' covariance diag(l) - c l l^T (dead time).
    node_error : float
        Checked relative error of the nodes.
    """

    flat: NDArray[np.int64]
    weight: NDArray[np.float64] | NDArray[np.float32]
    attenuation: NDArray[np.float64]
    lost_fraction: float
    node_error: float


def lost_fraction(dead_time_ns: float, count_time_s: float) -> float:
    """Dead time's coefficient c in the counts' covariance, for dead time much shorter than the exposure.

    Notes
    -----
    2 tau/T - (tau/T)^2: pairs closer than the dead time are missing. Source: D. F.
    Yu, J. A. Fessler, Phys. Med. Biol. 45 (2000) 2043.
    """
    return dead_fraction(dead_time_ns * NS, count_time_s)


def responses(
    calibration: Calibration,
    tables: NodeTables,
    flat: NDArray[np.int64],
    *,
    count_time_s: float,
    output: float = 1.0,
    threads: int = 1,
    precision: type[np.float32 | np.float64] = np.float64,
) -> Responses:
    """Node weights of pixels, from node tables near the exposure's photon rate.

    Parameters
    ----------
    calibration : Calibration
    tables : NodeTables
        As `Calibration.nodes` gives for the current.
    flat : array of int64, shape (pixel,)
    count_time_s : float
    output : float
        Photon rate over the tables' own; within a few percent of 1.
    threads : int
    precision : type
        Of the weights, and with them of the solver's arithmetic.
    """
    levels = calibration.levels_kev
    shape = flat.size, levels.size, tables.attenuation.shape[0]
    weight: Any = np.empty(shape, precision)
    table = stacked(tables)

    def block(first: int) -> None:
        part = slice(first, first + BLOCK)
        node_weights(
            table,
            levels,
            tables.by_bin[0].step_kev,
            calibration.pixels(flat[part]).brightened(output).values,
            count_time_s,
            weight[part],
        )

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(block, range(0, flat.size, BLOCK)))
    return Responses(
        flat=flat,
        weight=weight,
        attenuation=tables.attenuation,
        lost_fraction=lost_fraction(calibration.dead_time_ns, count_time_s),
        node_error=tables.error,
    )


def stacked(tables: NodeTables) -> NDArray[np.float64]:
    """Node tables as one array (bin, kind, grid, node) for the compiled loops."""
    return np.ascontiguousarray(
        [
            [t.curve.T, t.by_rate.T, t.by_variance.T, t.by_dead_time.T]
            for t in tables.by_bin
        ]
    )


def calibration_spread(
    calibration: Calibration,
    tables: NodeTables,
    ready: Responses,
    estimate: NDArray[np.float64],
    covariance: NDArray[np.float64],
    *,
    count_time_s: float,
    output: float = 1.0,
    threads: int = 1,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """What the calibration's own errors add to estimates.

    Parameters
    ----------
    calibration : Calibration
    tables : NodeTables
    ready : Responses
        Of the pixels, made from the tables.
    estimate : array, shape (pixel, material), in g/cm2
    covariance : array, shape (pixel, material, material)
        Of the estimates, by counting statistics.
    count_time_s, output : float
        As `responses`.
    threads : int

    Returns
    -------
    errors : array, shape (pixel, material), in g/cm2
        Standard deviation of the estimate's shift.
    extra : array, shape (pixel,)
        Share by which the deviance per degree of freedom rises.
    seen : array, shape (pixel,)
        Counts above the lowest threshold that the estimate leads one to expect.

    Notes
    -----
    First order: shift = F^-1 D^T C^-1 dl, with dl the change of the expected counts
    by the departures' posterior covariance.
    """
    flat = ready.flat
    errors = np.empty(estimate.shape)
    extra, seen = np.empty(flat.size), np.empty(flat.size)
    lost = lost_fraction(calibration.dead_time_ns, count_time_s)
    spread = calibration.departure_covariance.reshape(
        -1, *calibration.departure_covariance.shape[2:]
    )
    departures = calibration.pixels(flat).brightened(output).values
    table = stacked(tables).astype(np.float32)  # six digits do for an error

    def block(first: int) -> None:
        part = slice(first, first + BLOCK)
        calibration_shift.shifts(
            table,
            calibration.levels_kev,
            tables.by_bin[0].step_kev,
            tables.attenuation,
            departures[part],
            spread[flat[part]],
            ready.weight[part],
            estimate[part],
            covariance[part],
            lost,
            count_time_s,
            errors[part],
            extra[part],
            seen[part],
        )

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(block, range(0, flat.size, BLOCK)))
    return errors, extra, seen
