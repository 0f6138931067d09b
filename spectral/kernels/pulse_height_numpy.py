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

LEAST_KEV = 0.01
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
    third_kev: float,
    mu_third: float,
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

    Arguments as in `spectral.kernels.pulse_height.collect`.
    """
    everyone = np.arange(points.shape[0])

    def site(
        sample: NDArray[np.int64], spot: Floats, energy: Floats, variance: float
    ) -> tuple[NDArray[np.int64], Floats]:
        """Keys (sample, row, column) and energies of a deposit's nine pixels."""
        drift = thickness_um - spot[:, 2]
        shift = np.floor(spot[:, :2] / pitch_um).astype(np.int64)
        parts = _sites(
            spot[:, :2] - shift * pitch_um, spot[:, 2], variance, diffusion_um,
            thickness_um, pitch_um, table,
        )  # fmt: skip
        parts = (energy * (1.0 - trapping * drift / thickness_um))[
            :, None, None
        ] * parts
        i, j = np.broadcast_arrays(
            shift[:, 0, None, None] + ROW[:, None], shift[:, 1, None, None] + ROW
        )
        keys = np.stack(
            [np.broadcast_to(sample[:, None, None], i.shape), i, j], axis=-1
        )
        kept = parts >= LEAST_KEV
        return keys[kept], parts[kept]

    for e in np.flatnonzero(weight):
        reach = -np.expm1(-mu_in[e] * thickness_um)
        depth = -np.log1p(-points[:, 2] * reach) / mu_in[e]
        spot = np.column_stack([points[:, :2] * pitch_um, depth])
        sites = [site(everyone, spot, first_kev[e], variance0[e])]
        sent = everyone[second_kev[e] > 0.0]
        path = -np.log1p(-points[sent, 4]) / mu_second[e, sent]
        spot = _flown(spot[sent], path, cosine[e, sent], points[sent, 3])
        inside = (spot[:, 2] > 0.0) & (spot[:, 2] < thickness_um)
        sent, spot = sent[inside], spot[inside]
        sites.append(site(sent, spot, second_kev[e, sent] - third_kev, variance0[0]))
        if third_kev > 0.0:
            path = -np.log1p(-points[sent, 7]) / mu_third
            spot = _flown(spot, path, 2.0 * points[sent, 5] - 1.0, points[sent, 6])
            inside = (spot[:, 2] > 0.0) & (spot[:, 2] < thickness_um)
            sent, spot = sent[inside], spot[inside]
            sites.append(site(sent, spot, np.full(sent.size, third_kev), variance0[0]))
        keys = np.concatenate([k for k, _ in sites])
        parts = np.concatenate([p for _, p in sites])
        _, same = np.unique(keys, axis=0, return_inverse=True)
        heights = np.bincount(same.ravel(), weights=parts)
        heights = heights[heights > floor_kev]
        _deposit(out[e], heights / step_kev, weight[e] / points.shape[0])


def _flown(spot: Floats, path: Floats, cosine: Floats, turn: Floats) -> Floats:
    """Where photons from ``spot`` (sample, 3) are after ``path`` um."""
    side = path * np.sqrt(np.maximum(0.0, 1.0 - cosine**2))
    angle = 2.0 * np.pi * turn
    return spot + np.column_stack(
        [side * np.cos(angle), side * np.sin(angle), path * cosine]
    )


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


def _deposit(row: Floats, place: Floats, weight: float) -> None:
    """Add events, each split linearly between the two nearest grid points."""
    cell = place.astype(np.int64)
    inside = cell + 1 < row.size
    cell, part = cell[inside], (place - cell)[inside]
    row += weight * np.bincount(cell, weights=1.0 - part, minlength=row.size)
    row += weight * np.bincount(cell + 1, weights=part, minlength=row.size)
