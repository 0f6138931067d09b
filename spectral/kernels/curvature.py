"""What the curvature of the expectation adds to the variance, block by block.

Arrays are those of `pixel_lanes`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from numba import njit

from spectral.kernels.pixel_lanes import LANES

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

LARGEST_INFLATION = 0.5  # of the variance, by curvature


@njit(nogil=True, cache=True, error_model="numpy")
def bend(moment: Array, scale: Array, v: Array, g: Array, y: Array) -> None:
    """Curvature y_j = G_j v, with G_j = sum_e v_je d_e' C^-1 (second derivatives)."""
    rows, materials = scale.shape[0], v.shape[0]
    for e in range(materials):
        q = 1 + materials
        for k in range(materials):
            for i in range(k, materials):
                for lane in range(LANES):
                    g[e, k, i, lane] = 0.0
                for b in range(rows):
                    for lane in range(LANES):
                        product = moment[b, 1 + e, lane] * moment[b, q, lane]
                        g[e, k, i, lane] += product * scale[b, lane]
                for lane in range(LANES):
                    g[e, i, k, lane] = g[e, k, i, lane]
                q += 1
    for e in range(materials):
        for k in range(materials):
            for i in range(materials):
                for lane in range(LANES):
                    y[e, k, i, lane] = 0.0
                for j in range(materials):
                    for lane in range(LANES):
                        y[e, k, i, lane] += g[e, k, j, lane] * v[j, i, lane]
    for k in range(materials):
        for i in range(materials):
            for e in range(materials):
                for lane in range(LANES):
                    g[e, k, i, lane] = 0.0
                for j in range(materials):
                    for lane in range(LANES):
                        g[e, k, i, lane] += v[e, j, lane] * y[j, k, i, lane]
    y[:] = g


@njit(nogil=True, cache=True, error_model="numpy")
def inflate(f: Array, v: Array, y: Array, extra: Array, share: Array) -> None:
    """Add to v what the curvature of the expectation adds to the variance.

    Half of trace(y_j y_i), the second-order variance of a bias-corrected estimate
    but for its statistical-curvature term: S. Amari 1985, Differential-Geometrical
    Methods in Statistics, Springer, chapter 4 (from memory). share[l] is its mean
    ratio to v; above LARGEST_INFLATION the series is no guide and is cut there.
    """
    materials, real = f.shape[0], f.dtype.type
    one, half, part = real(1.0), real(0.5), real(1.0 / materials)
    largest, tiny = real(LARGEST_INFLATION), real(1e-30)
    for lane in range(LANES):
        share[lane] = 0.0
    for j in range(materials):
        for i in range(materials):
            for lane in range(LANES):
                extra[j, i, lane] = 0.0
            for k in range(materials):
                for e in range(materials):
                    for lane in range(LANES):
                        product = y[j, k, e, lane] * y[i, e, k, lane]
                        extra[j, i, lane] += half * product
            for lane in range(LANES):
                share[lane] += extra[j, i, lane] * f[j, i, lane] * part
    for j in range(materials):
        for i in range(materials):
            for lane in range(LANES):
                cut = min(one, largest / max(share[lane], tiny))
                v[j, i, lane] += cut * extra[j, i, lane]
