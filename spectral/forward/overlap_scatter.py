"""How much overlapping pulses widen the scatter of decomposed areal densities."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins
from spectral.forward.nodes import domain_points
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)
from spectral.physics.pileup import NS
from spectral.physics.pileup_scatter import overlap_covariance

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.forward.counting_model import CountingModel

PER_AXIS = 4
SMALL = 1e-3
"""Step of the numerical derivatives, over the largest areal density."""


def overlap_excess(
    model: CountingModel,
    levels_kev: NDArray[np.float64],
    largest: NDArray[np.float64],
    photon_rate: float,
) -> float:
    """Relative excess of the variance of an estimate, per recorded rate x dead time.

    Parameters
    ----------
    model : CountingModel
    levels_kev : array, shape (threshold,), in keV
    largest : array, shape (material,), in g/cm2
        Domain that the number must serve.
    photon_rate : float, in 1/s
        Of the open beam.

    Returns
    -------
    float
        kappa. Estimates weighted by C = diag(l) - c l l^T scatter with a covariance
        larger by the factor 1 + kappa x, x = recorded rate at the lowest threshold
        times effective dead time behind the object.

    Notes
    -----
    With the counts' true covariance C + D (`overlap_covariance`), J the derivative of
    the counts and I = J^T C^-1 J, the estimate has the covariance I^-1 + I^-1 J^T C^-1
    D C^-1 J I^-1. Source: P. J. Huber, Proc. 5th Berkeley Symp. 1 (1967) 221 (from
    memory). Overlaps go with the square of the rate, so the excess is proportional to
    x; it is nearly the same for all materials. Fitted over the domain.
    """
    points = np.maximum(domain_points(largest, per_axis=PER_AXIS, margin=0.0), 0.0)
    dead = model.shape.effective_ns * NS
    counted = _bins(model, levels_kev, points, photon_rate)
    total = counted.sum(axis=1)
    moves = SMALL * np.diag(largest)
    change = np.stack(
        [
            _bins(model, levels_kev, points + move, photon_rate)
            - _bins(model, levels_kev, points - move, photon_rate)
            for move in moves
        ],
        axis=2,
    )
    pulses = (model.transmitted(points) @ model.heights) * photon_rate
    added = overlap_covariance(pulses, model.shape, levels_kev, step_kev=model.step_kev)
    weight = np.linalg.inv(
        counted[:, :, None] * np.eye(levels_kev.size)
        - 2.0 * dead * counted[:, :, None] * counted[:, None, :]
    )
    pulled = weight @ change
    inverse = np.linalg.inv(change.transpose(0, 2, 1) @ pulled)
    more = inverse @ pulled.transpose(0, 2, 1) @ added @ pulled @ inverse
    share = np.einsum("pmm->pm", more) / np.einsum("pmm->pm", inverse)
    x = total * dead
    return float((share.mean(axis=1) @ x) / (x @ x))


def _bins(
    model: CountingModel,
    levels_kev: NDArray[np.float64],
    points: NDArray[np.float64],
    rate: float,
) -> NDArray[np.float64]:
    """Counts per second of the average pixel, shape (point, bin)."""
    average = PixelDepartures(values=np.zeros((1, levels_kev.size + 3)))
    above, _ = expected_above(curve_tables(model, points, rate), levels_kev, average)
    return counts_to_bins(above[0])
