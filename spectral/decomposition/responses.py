"""Responses of pixels at one exposure's conditions, ready for the solver."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.node_response import NodeTables, pixel_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

NS = 1e-9
BLOCK = 8192


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Responses:
    """Expected counts of pixels as sums over nodes, for one count time.

    Attributes
    ----------
    flat : array of int64, shape (pixel,)
        Flat indices of the pixels.
    weight : array, shape (pixel, bin, node)
        Counts of each node without an object.
    attenuation : array, shape (node, material), in cm2/g
    lost_fraction : float
        c in the counts' covariance diag(l) - c l l^T (dead time).
    node_error : float
        Checked relative error of the nodes.
    """

    flat: NDArray[np.int64]
    weight: NDArray[np.float64]
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
    share = dead_time_ns * NS / count_time_s
    return float(2.0 * share - share**2)


def responses(
    calibration: Calibration,
    tables: NodeTables,
    flat: NDArray[np.int64],
    *,
    count_time_s: float,
    output: float = 1.0,
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
    """
    weight = np.empty(
        (flat.size, calibration.levels_kev.size, tables.attenuation.shape[0])
    )
    for first in range(0, flat.size, BLOCK):
        part = slice(first, first + BLOCK)
        weight[part], _ = pixel_weights(
            tables,
            calibration.levels_kev,
            calibration.pixels(flat[part]).brightened(output),
        )
    weight *= count_time_s
    return Responses(
        flat=flat,
        weight=weight,
        attenuation=tables.attenuation,
        lost_fraction=lost_fraction(calibration.dead_time_ns, count_time_s),
        node_error=tables.error,
    )


def calibration_spread(
    calibration: Calibration,
    tables: NodeTables,
    flat: NDArray[np.int64],
    estimate: NDArray[np.float64],
    covariance: NDArray[np.float64],
    *,
    count_time_s: float,
    output: float = 1.0,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """What the calibration's own errors add to estimates.

    Parameters
    ----------
    calibration : Calibration
    tables : NodeTables
    flat : array of int64, shape (pixel,)
    estimate : array, shape (pixel, material), in g/cm2
    covariance : array, shape (pixel, material, material)
        Of the estimates, by counting statistics.
    count_time_s, output : float
        As `responses`.

    Returns
    -------
    errors : array, shape (pixel, material), in g/cm2
        Standard deviation of the estimate's shift.
    extra : array, shape (pixel,)
        Share by which the deviance per degree of freedom rises.

    Notes
    -----
    First order: shift = F^-1 D^T C^-1 dl, with dl the change of the expected counts
    by the departures' posterior covariance.
    """
    materials = estimate.shape[1]
    errors = np.empty((flat.size, materials))
    extra = np.empty(flat.size)
    lost = lost_fraction(calibration.dead_time_ns, count_time_s)
    spread = calibration.departure_covariance.reshape(
        -1, *calibration.departure_covariance.shape[2:]
    )
    for first in range(0, flat.size, BLOCK // 4):
        part = slice(first, first + BLOCK // 4)
        weight, change = pixel_weights(
            tables,
            calibration.levels_kev,
            calibration.pixels(flat[part]).brightened(output),
            derivatives=True,
        )
        passed = np.exp(-estimate[part] @ tables.attenuation.T)
        counts = np.maximum((weight @ passed[..., None])[..., 0] * count_time_s, 1e-6)
        slope = -(weight * passed[:, None]) @ tables.attenuation * count_time_s
        moved = (change @ passed[:, None, :, None])[..., 0] * count_time_s
        boost = lost / np.maximum(1.0 - lost * counts.sum(axis=1), 0.1)
        weighted = slope / counts[..., None]
        weighted += (boost[:, None] * slope.sum(axis=1))[:, None, :]
        gain = covariance[part] @ (weighted.transpose(0, 2, 1) @ moved)
        own = spread[flat[part]].astype(np.float64)
        shift = gain @ own @ gain.transpose(0, 2, 1)
        errors[part] = np.sqrt(np.maximum(np.diagonal(shift, axis1=1, axis2=2), 0.0))
        # what the fit cannot follow of the change raises the deviance
        rest = moved - slope @ gain
        variance = np.einsum("pbq,pqr,pbr->pb", rest, own, rest)
        freedom = max(counts.shape[1] - materials, 1)
        extra[part] = (variance / counts).sum(axis=1) / freedom
    return errors, extra
