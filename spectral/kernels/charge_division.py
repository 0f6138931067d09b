"""Compiled division of a deposit's charge between pixels.

Flat arrays in, lists of pixels filled, no validation. The NumPy twin stands in
`spectral.kernels.photon_transport_numpy`.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from numba import njit

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

TOUCHED = 64
SQRT_HALF = math.sqrt(0.5)


@njit(nogil=True, cache=True)
def _normal_cdf(value: float) -> float:
    """Standard normal distribution function."""
    return 0.5 * math.erfc(-value * SQRT_HALF)


@njit(nogil=True, cache=True)
def _divide(
    place: float,
    sigma: float,
    pitch: float,
    half_gap: float,
    gap_loss: float,
    share: NDArray[np.float64],
) -> None:
    """Shares of a cloud at ``place`` in [0, pitch) left, inside and right.

    Of charge that lands within ``half_gap`` of a border, ``gap_loss`` is lost.
    """
    share[0] = 0.0
    share[1] = 1.0
    share[2] = 0.0
    near = 6.0 * sigma + half_gap
    if place < near:
        border = _normal_cdf(-place / sigma)
        share[0] = border
        share[1] -= border
        if half_gap > 0.0:
            before = _normal_cdf((-half_gap - place) / sigma)
            after = _normal_cdf((half_gap - place) / sigma)
            share[0] -= gap_loss * (border - before)
            share[1] -= gap_loss * (after - border)
    if pitch - place < near:
        border = _normal_cdf((place - pitch) / sigma)
        share[2] = border
        share[1] -= border
        if half_gap > 0.0:
            before = _normal_cdf((place - pitch - half_gap) / sigma)
            after = _normal_cdf((place - pitch + half_gap) / sigma)
            share[2] -= gap_loss * (border - before)
            share[1] -= gap_loss * (after - border)


@njit(nogil=True, cache=True)
def _read_cloud(
    cloud_um: NDArray[np.float64],
    energy: float,
    drift: float,
    energy_step: float,
    drift_step: float,
) -> float:
    """Bilinear reading of the cloud's size table."""
    row = min(energy / energy_step, cloud_um.shape[0] - 1.000001)
    column = min(drift / drift_step, cloud_um.shape[1] - 1.000001)
    i, j = int(row), int(column)
    u, v = row - i, column - j
    low = cloud_um[i, j] + v * (cloud_um[i, j + 1] - cloud_um[i, j])
    high = cloud_um[i + 1, j] + v * (cloud_um[i + 1, j + 1] - cloud_um[i + 1, j])
    return float(low + u * (high - low))


@njit(nogil=True, cache=True)
def collect(
    x: float,
    y: float,
    drift: float,
    energy: float,
    normal: float,
    slab: NDArray[np.float64],
    cloud_um: NDArray[np.float64],
    collected: NDArray[np.float64],
    work: NDArray[np.float64],
    touched: NDArray[np.int64],
    n_touched: int,
    charge: NDArray[np.float64],
) -> int:
    """Divide one deposit between pixels; returns how many pixels hold charge."""
    pitch = slab[1]
    energy += normal * math.sqrt(slab[4] * energy)
    if energy <= 0.0:
        return n_touched
    sigma = _read_cloud(cloud_um, energy, drift, slab[5], slab[6])
    column = min(drift / slab[6], collected.size - 1.000001)
    cell = int(column)
    kept = collected[cell] + (column - cell) * (collected[cell + 1] - collected[cell])
    energy *= kept
    ix = math.floor(x / pitch)
    iy = math.floor(y / pitch)
    _divide(x - ix * pitch, sigma, pitch, slab[2], slab[3], work[0])
    _divide(y - iy * pitch, sigma, pitch, slab[2], slab[3], work[1])
    for a in range(3):
        for b in range(3):
            part = energy * work[0, a] * work[1, b]
            if part < 1e-6:
                continue
            px = ix + a - 1
            py = iy + b - 1
            found = -1
            for j in range(n_touched):
                if touched[j, 0] == px and touched[j, 1] == py:
                    found = j
                    break
            if found < 0 and n_touched < TOUCHED:
                found = n_touched
                touched[found, 0] = px
                touched[found, 1] = py
                charge[found] = 0.0
                n_touched += 1
            if found >= 0:
                charge[found] += part
    return n_touched
