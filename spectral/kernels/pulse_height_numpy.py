"""NumPy twin of `spectral.kernels.pulse_height`: all samples of an energy at once.

Takes the same arguments and reads the same table of the normal distribution, so it
gives the same sums but for the order in which they are added.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

TABLE_REACH = 5.0
TABLE_PER_UNIT = 200.0
ROW = np.arange(3)
"""The pixel before, the pixel itself and the one after."""


def collect(
    out: Floats,
    weight: Floats,
    points: Floats,
    mu_in: Floats,
    first_kev: Floats,
    second_kev: Floats,
    mu_second: Floats,
    cosine: Floats,
    variance0: Floats,
    diffusion_um: float,
    thickness_um: float,
    pitch_um: float,
    trapping: float,
    floor_kev: float,
    step_kev: float,
    table: Floats,
) -> None:
    """Add to ``out`` (energy, grid) the events of one interaction channel.

    Parameters
    ----------
    out, weight, points, mu_in, first_kev, second_kev, mu_second, cosine, variance0,
    diffusion_um, thickness_um, pitch_um, trapping, floor_kev, step_kev, table
        As in `spectral.kernels.pulse_height.collect`.
    """
    place = points[:, :2] * pitch_um
    turn = 2.0 * np.pi * points[:, 3]
    direction = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    for e in np.flatnonzero(weight):
        reach = -np.expm1(-mu_in[e] * thickness_um)
        depth = -np.log1p(-points[:, 2] * reach) / mu_in[e]
        own = _sites(place, depth, variance0[e], diffusion_um, thickness_um, pitch_um,
                     table)  # fmt: skip
        kept = 1.0 - trapping * (thickness_um - depth) / thickness_um
        energy = (first_kev[e] * kept)[:, None, None] * own
        path = -np.log1p(-points[:, 4]) / mu_second[e]
        other_depth = depth + path * cosine[e]
        stays = (second_kev[e] > 0.0) & (other_depth > 0.0)
        stays &= other_depth < thickness_um
        side = path * np.sqrt(np.maximum(0.0, 1.0 - cosine[e] ** 2))
        far = (place + side[:, None] * direction)[stays]
        other_depth = other_depth[stays]
        shift = np.floor(far / pitch_um).astype(np.int64)
        parts = _sites(far - shift * pitch_um, other_depth, variance0[0],
                       diffusion_um, thickness_um, pitch_um, table)  # fmt: skip
        kept = 1.0 - trapping * (thickness_um - other_depth) / thickness_um
        parts = (second_kev[e, stays] * kept)[:, None, None] * parts
        apart = _join(energy, np.flatnonzero(stays), parts, shift)
        heights = np.concatenate([energy.ravel(), apart])
        heights = heights[heights > floor_kev]
        _deposit(out[e], heights / step_kev, weight[e] / points.shape[0])


def _sites(
    place: Floats,
    depth: Floats,
    variance0: float,
    diffusion_um: float,
    thickness_um: float,
    pitch_um: float,
    table: Floats,
) -> Floats:
    """Fractions of clouds within 3 x 3 pixels, shape (sample, 3, 3)."""
    sigma = np.sqrt(variance0 + diffusion_um * (thickness_um - depth))
    border = np.arange(-1.0, 3.0) * pitch_um
    below = _normal_cdf((border - place[..., None]) / sigma[:, None, None], table)
    share = np.diff(below, axis=2)
    return np.asarray(share[:, 0, :, None] * share[:, 1, None, :])


def _normal_cdf(value: Floats, table: Floats) -> Floats:
    """Normal distribution function read from the table; 0 and 1 beyond its ends."""
    place = (value + TABLE_REACH) * TABLE_PER_UNIT
    known = np.interp(place, np.arange(table.size), table)
    return np.where(place <= 0.0, 0.0, np.where(place >= table.size - 1, 1.0, known))


def _join(
    energy: Floats, sample: NDArray[np.int64], parts: Floats, shift: NDArray[np.int64]
) -> Floats:
    """Add second sites where they share pixels with the first; return the others."""
    apart = []
    for a in ROW:
        for b in ROW:
            i, j = a + shift[:, 0], b + shift[:, 1]
            shared = (i >= 0) & (i < 3) & (j >= 0) & (j < 3)
            energy[sample[shared], i[shared], j[shared]] += parts[shared, a, b]
            apart.append(parts[~shared, a, b])
    return np.concatenate(apart)


def _deposit(row: Floats, place: Floats, weight: float) -> None:
    """Add events, each split linearly between the two nearest grid points."""
    cell = place.astype(np.int64)
    inside = cell + 1 < row.size
    cell, part = cell[inside], (place - cell)[inside]
    row += weight * np.bincount(cell, weights=1.0 - part, minlength=row.size)
    row += weight * np.bincount(cell + 1, weights=part, minlength=row.size)
