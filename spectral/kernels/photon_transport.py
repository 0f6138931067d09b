"""Compiled transport of single photons through a pixelated sensor.

Each photon enters the slab at normal incidence at a place in pixel (0, 0), is
absorbed or scattered, may send out K photons that are followed in turn, and every
deposit's charge is divided between pixels. What each pixel collected is a pulse.

Flat arrays in, output arrays filled, no validation; `spectral.virtual.pulse_library`
prepares the tables. The NumPy twin stands in `spectral.kernels.photon_transport_numpy`
and draws the same random numbers.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from spectral.kernels.charge_division import TOUCHED, collect
from spectral.kernels.random_stream import substream, uniform

if TYPE_CHECKING:
    from numpy.typing import NDArray

# Golden-ratio sequence in four dimensions: powers of 1/g, g the root of g^5 = g + 1.
# Source: M. Roberts, "The unreasonable effectiveness of quasirandom sequences" (2018),
# after H. Niederreiter's additive recurrences; recomputed here.
SPREAD = (0.8566748838545029, 0.733891856627126, 0.6287067210378086, 0.53859725722361)
DRAWS_PER_FLIGHT = 8
MOST_FLIGHTS = 16
ELECTRON_REST_KEV = 510.99895


@njit(nogil=True, cache=True)
def _turn(
    flight: NDArray[np.float64], cosine: float, azimuth: float, out: NDArray[np.float64]
) -> None:
    """Direction of ``flight`` turned by an angle, written to ``out``."""
    ux, uy, uz = flight[3], flight[4], flight[5]
    sine = math.sqrt(max(0.0, 1.0 - cosine * cosine))
    c = sine * math.cos(azimuth)
    s = sine * math.sin(azimuth)
    across = math.sqrt(max(0.0, 1.0 - uz * uz))
    if across < 1e-9:
        out[3], out[4], out[5] = c, s * uz, cosine * uz
        return
    out[3] = cosine * ux + (c * ux * uz - s * uy) / across
    out[4] = cosine * uy + (c * uy * uz + s * ux) / across
    out[5] = cosine * uz - c * across


@njit(nogil=True, cache=True)
def _point(cosine: float, azimuth: float, out: NDArray[np.float64]) -> None:
    """Direction by its angles, written to ``out``."""
    sine = math.sqrt(1.0 - cosine * cosine)
    out[3] = sine * math.cos(azimuth)
    out[4] = sine * math.sin(azimuth)
    out[5] = cosine


@njit(nogil=True, cache=True)
def _choose_line(
    chosen: float,
    cell: int,
    part: float,
    line_reach: NDArray[np.float64],
    line_kev: NDArray[np.float64],
) -> float:
    """Energy of the K photon that an absorption sends out, or 0."""
    for line in range(line_kev.size):
        low = line_reach[line, cell]
        if chosen < low + part * (line_reach[line, cell + 1] - low):
            return float(line_kev[line])
    return 0.0


@njit(nogil=True, cache=True)
def _choose_cosine(chosen: float, row: float, cosines: NDArray[np.float64]) -> float:
    """Cosine of a Compton scattering, at a quantile and the nearest energy."""
    i = int(min(row, cosines.shape[0] - 1.0) + 0.5)
    column = chosen * (cosines.shape[1] - 1)
    at = int(column)
    low = cosines[i, at]
    return float(low + (column - at) * (cosines[i, at + 1] - low))


@njit(nogil=True, cache=True)
def _follow(
    key: np.uint64,
    first_depth: float,
    slab: NDArray[np.float64],
    grid: NDArray[np.float64],
    attenuation: NDArray[np.float64],
    photo_share: NDArray[np.float64],
    line_reach: NDArray[np.float64],
    line_kev: NDArray[np.float64],
    cosines: NDArray[np.float64],
    cloud_um: NDArray[np.float64],
    collected: NDArray[np.float64],
    flight: NDArray[np.float64],
    following: NDArray[np.float64],
    work: NDArray[np.float64],
    touched: NDArray[np.int64],
    charge: NDArray[np.float64],
) -> int:
    """Follow a photon, then the one it leaves behind, until none is left.

    An absorbed photon leaves one K photon or none, a scattered one itself.
    """
    thickness = slab[0]
    n_touched = 0
    flights = 0
    while flights < MOST_FLIGHTS:
        draw = np.uint64(flights * DRAWS_PER_FLIGHT)
        energy = flight[6]
        place = (energy - grid[0]) / grid[1]
        cell = min(max(int(place), 0), attenuation.size - 2)
        part = place - cell
        mu = attenuation[cell] + part * (attenuation[cell + 1] - attenuation[cell])
        path = first_depth if flights == 0 else uniform(key, draw)
        path = -math.log(path) / mu
        for axis in range(3):
            flight[axis] += path * flight[3 + axis]
        flights += 1
        if flight[2] < 0.0 or flight[2] > thickness:
            break
        share = photo_share[cell] + part * (photo_share[cell + 1] - photo_share[cell])
        absorbed = uniform(key, draw + np.uint64(1)) < share
        azimuth = 2.0 * math.pi * uniform(key, draw + np.uint64(4))
        turned = uniform(key, draw + np.uint64(3))
        if absorbed:
            chosen = uniform(key, draw + np.uint64(2))
            remaining = _choose_line(chosen, cell, part, line_reach, line_kev)
            _point(2.0 * turned - 1.0, azimuth, following)
        else:
            cosine = _choose_cosine(turned, energy / grid[2], cosines)
            remaining = energy / (1.0 + energy / ELECTRON_REST_KEV * (1.0 - cosine))
            _turn(flight, cosine, azimuth, following)
        radius = math.sqrt(-2.0 * math.log(uniform(key, draw + np.uint64(5))))
        normal = radius * math.cos(2.0 * math.pi * uniform(key, draw + np.uint64(6)))
        if remaining < grid[3] or flights == MOST_FLIGHTS:
            remaining = 0.0
        n_touched = collect(
            flight[0], flight[1], thickness - flight[2], energy - remaining, normal, slab,
            cloud_um, collected, work, touched, n_touched, charge,
        )  # fmt: skip
        if remaining == 0.0:
            break
        flight[3], flight[4], flight[5] = following[3], following[4], following[5]
        flight[6] = remaining
    return n_touched


@njit(nogil=True, cache=True)
def transport(
    key: np.uint64,
    first: int,
    photons: int,
    energy_low: float,
    energy_high: float,
    slab: NDArray[np.float64],
    grid: NDArray[np.float64],
    attenuation: NDArray[np.float64],
    photo_share: NDArray[np.float64],
    line_reach: NDArray[np.float64],
    line_kev: NDArray[np.float64],
    cosines: NDArray[np.float64],
    cloud_um: NDArray[np.float64],
    collected: NDArray[np.float64],
    floor_kev: float,
    height: NDArray[np.float32],
    offset: NDArray[np.int16],
    begin: NDArray[np.int64],
) -> int:
    """Pulses of ``photons`` photons, evenly spread over pixel (0, 0) and an energy bin.

    Parameters
    ----------
    key : uint64
        Stream of the run; each photon has its own below it.
    first, photons : int
        Number of the first photon, and how many.
    energy_low, energy_high : float, in keV
    slab : array, (thickness, pitch, half gap in um, gap loss, Fano factor times pair
        energy in keV, energy step of ``cloud_um`` in keV, its drift step in um)
    grid : array, (first energy, step of the cross-section tables, step of ``cosines``,
        energy below which a photon stays where it is), in keV
    attenuation, photo_share : array, shape (grid,), in 1/um and as a share
    line_reach : array, shape (line, grid)
        Running sum over the lines of the probability of emission per photoabsorption.
    line_kev : array, shape (line,), in keV
    cosines : array, shape (energy, quantile)
        Compton cosines.
    cloud_um : array, shape (energy, drift), in um
    collected : array, shape (drift,)
        Share of the charge that is collected.
    floor_kev : float
        Smaller pulses are left out.
    height, offset : arrays, shape (pulse,), (pulse, 2)
        Filled: collected energy in keV, pixel (row, column) relative to the photon's.
    begin : array, shape (photons + 1,)
        Filled: where each photon's pulses start.

    Returns
    -------
    int
        Number of pulses, or -1 if ``height`` was too short.
    """
    flight = np.empty(7)
    following = np.empty(7)
    work = np.empty((2, 3))
    touched = np.empty((TOUCHED, 2), np.int64)
    charge = np.empty(TOUCHED)
    pulses = 0
    begin[0] = 0
    for i in range(photons):
        number = first + i
        own = substream(key, np.uint64(number))
        spread0 = (0.5 + SPREAD[0] * (number + 1)) % 1.0
        spread1 = (0.5 + SPREAD[1] * (number + 1)) % 1.0
        spread2 = (0.5 + SPREAD[2] * (number + 1)) % 1.0
        spread3 = (0.5 + SPREAD[3] * (number + 1)) % 1.0
        flight[0] = spread0 * slab[1]
        flight[1] = spread1 * slab[1]
        flight[2] = 0.0
        flight[3] = 0.0
        flight[4] = 0.0
        flight[5] = 1.0
        flight[6] = energy_low + spread3 * (energy_high - energy_low)
        n_touched = _follow(
            own, 1.0 - spread2, slab, grid, attenuation, photo_share, line_reach,
            line_kev, cosines, cloud_um, collected, flight, following, work, touched,
            charge,
        )  # fmt: skip
        if pulses + n_touched > height.size:
            return -1
        for j in range(n_touched):
            if charge[j] >= floor_kev:
                height[pulses] = charge[j]
                offset[pulses, 0] = touched[j, 1]
                offset[pulses, 1] = touched[j, 0]
                pulses += 1
        begin[i + 1] = pulses
    return pulses
