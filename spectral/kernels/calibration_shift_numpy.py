"""NumPy twin of `spectral.kernels.calibration_shift`."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.kernels.pixel_likelihood_numpy import cubic_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]


def shifts(
    tables: Array,
    levels: Array,
    step: float,
    attenuation: Array,
    departures: Array,
    spread: NDArray[np.float32],
    weight: Array,
    estimate: Array,
    covariance: Array,
    lost: float,
    count_time: float,
    errors: Array,
    extra: Array,
    seen: Array,
) -> None:
    """Fill the same arrays as the compiled function, for a few pixels at a time."""
    pixels, materials = estimate.shape
    bins, size = levels.size, departures.shape[1]
    first, value, slope_by = cubic_weights(
        levels + departures[:, 1:-2], step, tables.shape[2]
    )
    passed = np.exp(-estimate @ attenuation.T) * count_time
    area = np.exp(departures[:, 0])
    mix = np.stack(
        [np.ones(pixels), departures[:, 0], departures[:, -2], departures[:, -1]]
    )
    moved = np.zeros((pixels, bins, size))
    counts = np.zeros((pixels, bins))
    for k in range(bins):
        for b in range(max(k - 1, 0), k + 1):
            sign = 1.0 if b == k else -1.0
            read = np.stack(
                [
                    np.einsum("pn,cpn->cp", passed, tables[b][:, first[:, k] + q])
                    for q in range(4)
                ]
            )
            at = np.einsum("qp,qcp->cp", value[:, :, k], read)
            along = np.einsum("qp,qcp->cp", slope_by[:, :, k], read)
            above = area * (mix * at).sum(axis=0)
            counts[:, b] += sign * above
            moved[:, b, 0] += sign * (above + area * at[1])
            moved[:, b, 1 + k] += sign * area * (mix * along).sum(axis=0)
            moved[:, b, -2] += sign * area * at[2]
            moved[:, b, -1] += sign * area * at[3]
    counts = np.maximum(counts, 1e-6)
    seen[...] = counts.sum(axis=1)
    slope = -np.einsum("pbn,pn,nm->pbm", weight, passed / count_time, attenuation)
    boost = lost / np.maximum(1.0 - lost * counts.sum(axis=1), 0.1)
    weighted = slope / counts[..., None]
    weighted += (boost[:, None] * slope.sum(axis=1))[:, None, :]
    gain = covariance @ (weighted.transpose(0, 2, 1) @ moved)
    own = spread.astype(np.float64)
    shift = np.einsum("pmi,pij,pmj->pm", gain, own, gain)
    errors[...] = np.sqrt(np.maximum(shift, 0.0))
    rest = moved - slope @ gain
    variance = np.einsum("pbi,pij,pbj->pb", rest, own, rest)
    extra[...] = (variance / counts).sum(axis=1) / max(bins - materials, 1)
