"""NumPy twin of `spectral.kernels.photon_transport`: all photons step together.

Draws the same random numbers photon by photon, so it finds the same pulses; deposits
are collected in a map of pixels per photon instead of a list of those touched.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtr

from spectral.kernels.random_stream import substream_array, uniform_array

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

SPREAD = (0.8566748838545029, 0.733891856627126, 0.6287067210378086, 0.53859725722361)
DRAWS_PER_FLIGHT = 8
MOST_FLIGHTS = 16
REACH = 12
ELECTRON_REST_KEV = 510.99895


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TransportTables:
    """The tables that `transport` takes, under the same names."""

    slab: Floats
    grid: Floats
    attenuation: Floats
    photo_share: Floats
    line_reach: Floats
    line_kev: Floats
    cosines: Floats
    cloud_um: Floats
    collected: Floats


def transport(
    key: np.uint64,
    first: int,
    photons: int,
    energy_low: float,
    energy_high: float,
    tables: TransportTables,
) -> Floats:
    """Energy that each pixel collects of each photon, in keV.

    Parameters
    ----------
    key, first, photons, energy_low, energy_high
        As in `spectral.kernels.photon_transport.transport`.
    tables : TransportTables

    Returns
    -------
    array, shape (photon, row, column)
        The photon's own pixel in the middle; what goes further than `REACH` is lost.
    """
    number = first + np.arange(photons)
    own = substream_array(np.full(photons, key, np.uint64), number.astype(np.uint64))
    x, y, depth, place = (0.5 + np.outer(SPREAD, number + 1)) % 1.0
    where = np.stack([x * tables.slab[1], y * tables.slab[1], 0.0 * x])
    heading = np.zeros((3, photons))
    heading[2] = 1.0
    energy = energy_low + place * (energy_high - energy_low)
    image = np.zeros((photons, 2 * REACH + 1, 2 * REACH + 1))
    alive = np.arange(photons)
    for flight in range(MOST_FLIGHTS):
        draw = np.full(alive.size, flight * DRAWS_PER_FLIGHT, np.uint64)
        u = [uniform_array(own[alive], draw + np.uint64(j)) for j in range(7)]
        if flight == 0:
            u[0] = 1.0 - depth
        path = -np.log(u[0]) / _read(tables.attenuation, energy, tables)
        where = where + path * heading
        inside = (where[2] >= 0.0) & (where[2] <= tables.slab[0])
        alive, energy = alive[inside], energy[inside]
        where, heading = where[:, inside], heading[:, inside]
        u = [each[inside] for each in u]
        left, heading = _interact(u, energy, heading, tables)
        left[(left < tables.grid[3]) | (flight + 1 == MOST_FLIGHTS)] = 0.0
        normal = np.sqrt(-2.0 * np.log(u[5])) * np.cos(2.0 * np.pi * u[6])
        _collect(image, alive, where, energy - left, normal, tables)
        on = left > 0.0
        alive, energy = alive[on], left[on]
        where, heading = where[:, on], heading[:, on]
        if alive.size == 0:
            break
    return image


def _read(table: Floats, energy: Floats, tables: TransportTables) -> Floats:
    """Linear reading of a table on the cross-section grid."""
    grid = tables.grid[0] + tables.grid[1] * np.arange(table.size)
    return np.asarray(np.interp(energy, grid, table))


def _interact(
    u: list[Floats], energy: Floats, heading: Floats, tables: TransportTables
) -> tuple[Floats, Floats]:
    """Energy and direction of the photon that each interaction leaves, 0 if none."""
    azimuth = 2.0 * np.pi * u[4]
    absorbed = u[1] < _read(tables.photo_share, energy, tables)
    left = np.zeros(energy.size)
    for line in range(tables.line_kev.size - 1, -1, -1):
        reach = _read(tables.line_reach[line], energy, tables)
        left = np.where(u[2] < reach, tables.line_kev[line], left)
    even = 2.0 * u[3] - 1.0
    sine = np.sqrt(1.0 - even**2)
    isotropic = np.stack([sine * np.cos(azimuth), sine * np.sin(azimuth), even])
    row = np.minimum(energy / tables.grid[2], tables.cosines.shape[0] - 1.0)
    row_index = (row + 0.5).astype(np.int64)
    column = u[3] * (tables.cosines.shape[1] - 1)
    at = column.astype(np.int64)
    low = tables.cosines[row_index, at]
    cosine = low + (column - at) * (tables.cosines[row_index, at + 1] - low)
    scattered = energy / (1.0 + energy / ELECTRON_REST_KEV * (1.0 - cosine))
    turned = _turn(heading, cosine, azimuth)
    return (
        np.where(absorbed, left, scattered),
        np.where(absorbed, isotropic, turned),
    )


def _turn(heading: Floats, cosine: Floats, azimuth: Floats) -> Floats:
    """Directions turned by angles, from a frame of three perpendicular vectors."""
    upright = np.hypot(heading[0], heading[1]) < 1e-9
    across = np.where(upright, 1.0, np.hypot(heading[0], heading[1]))
    x, y, z = heading
    first = np.where(upright, [[1.0], [0.0], [0.0]], [x * z, y * z, -(across**2)])
    first = np.where(upright, first, first / across)
    second = np.where(
        upright, np.stack([0 * z, z, 0 * z]), np.stack([-y, x, 0 * z]) / across
    )
    sine = np.sqrt(np.maximum(0.0, 1.0 - cosine**2))
    return np.asarray(
        cosine * heading
        + sine * np.cos(azimuth) * first
        + sine * np.sin(azimuth) * second
    )


def _collect(
    image: Floats,
    photon: NDArray[np.int64],
    where: Floats,
    energy: Floats,
    normal: Floats,
    tables: TransportTables,
) -> None:
    """Divide deposits between pixels."""
    thickness, pitch, _, _, fano, energy_step, drift_step = tables.slab
    drift = thickness - where[2]
    energy = np.maximum(energy + normal * np.sqrt(fano * energy), 0.0)
    row = energy / energy_step
    i = np.minimum(row.astype(np.int64), tables.cloud_um.shape[0] - 2)
    column = drift / drift_step
    j = np.minimum(column.astype(np.int64), tables.cloud_um.shape[1] - 2)
    u, v = row - i, column - j
    cloud = tables.cloud_um
    low = cloud[i, j] + v * (cloud[i, j + 1] - cloud[i, j])
    high = cloud[i + 1, j] + v * (cloud[i + 1, j + 1] - cloud[i + 1, j])
    sigma = low + u * (high - low)
    steps = drift_step * np.arange(tables.collected.size)
    charge = energy * np.interp(drift, steps, tables.collected)
    ix = np.floor(where[0] / pitch).astype(np.int64)
    iy = np.floor(where[1] / pitch).astype(np.int64)
    along = _divide(where[0] - ix * pitch, sigma, tables)
    up = _divide(where[1] - iy * pitch, sigma, tables)
    near = (np.abs(ix) < REACH) & (np.abs(iy) < REACH)
    for a in range(3):
        for b in range(3):
            part = np.where(near, charge * along[a] * up[b], 0.0)
            part[part < 1e-6] = 0.0
            target = (
                photon,
                np.clip(iy + b - 1, -REACH, REACH) + REACH,
                np.clip(ix + a - 1, -REACH, REACH) + REACH,
            )
            np.add.at(image, target, part)


def _divide(place: Floats, sigma: Floats, tables: TransportTables) -> list[Floats]:
    """Shares of clouds left, inside and right."""
    pitch, half_gap, gap_loss = tables.slab[1:4]

    def below(border: float) -> Floats:
        return np.asarray(ndtr((border - place) / sigma))

    near = 6.0 * sigma + half_gap
    by_left, by_right = place < near, pitch - place < near
    left = below(0.0) - gap_loss * (below(0.0) - below(-half_gap))
    right_all = 1.0 - below(pitch)
    right = right_all - gap_loss * (below(pitch + half_gap) - below(pitch))
    from_left = below(0.0) + gap_loss * (below(half_gap) - below(0.0))
    from_right = right_all + gap_loss * (below(pitch) - below(pitch - half_gap))
    left, from_left = np.where(by_left, (left, from_left), 0.0)
    right, from_right = np.where(by_right, (right, from_right), 0.0)
    return [left, 1.0 - from_left - from_right, right]
