"""Compiled sum over sampled events of up to three sites: energies collected by square pixels.

Flat arrays in, an ``out`` array filled; no validation. `spectral.physics.sensor`
prepares the arguments and says what they mean; the NumPy twin stands in
`spectral.kernels.pulse_height_numpy`.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

if TYPE_CHECKING:
    from numpy.typing import NDArray

LEAST_KEV = 0.01
"""A pixel's smaller share of a deposit is dropped."""


@njit(nogil=True, cache=True, error_model="numpy")
def _normal_cdf(value: float, table: NDArray[np.float64]) -> float:
    """Normal distribution function read from a table on [-5, 5], 200 a unit."""
    place = (value + 5.0) * 200.0
    if place <= 0.0:
        return 0.0
    if place >= 2000.0:
        return 1.0
    cell = int(place)
    share = place - cell
    return float(table[cell] + share * (table[cell + 1] - table[cell]))


@njit(nogil=True, cache=True, error_model="numpy")
def _shares(
    place: float,
    sigma: float,
    pitch: float,
    table: NDArray[np.float64],
    share: NDArray[np.float64],
) -> None:
    """Fractions of a cloud at ``place`` in [0, pitch) within three pixels of a row."""
    last = _normal_cdf((-pitch - place) / sigma, table)
    for j in range(3):
        following = _normal_cdf(((j) * pitch - place) / sigma, table)
        share[j] = following - last
        last = following


@njit(nogil=True, cache=True, error_model="numpy")
def _deposit(row: NDArray[np.float64], energy: float, step: float, w: float) -> None:
    """Add one event, split linearly between the two nearest grid points."""
    place = energy / step
    cell = int(place)
    if cell + 1 < row.shape[0]:
        part = place - cell
        row[cell] += w * (1.0 - part)
        row[cell + 1] += w * part


@njit(nogil=True, cache=True, error_model="numpy")
def _add_site(
    held: int,
    x: float,
    y: float,
    drift: float,
    energy: float,
    variance: float,
    diffusion_um: float,
    thickness_um: float,
    pitch_um: float,
    trapping: float,
    table: NDArray[np.float64],
    share_x: NDArray[np.float64],
    share_y: NDArray[np.float64],
    pixel: NDArray[np.int64],
    collected: NDArray[np.float64],
) -> int:
    """Divide one deposit between pixels; entries of one pixel add up.

    Returns the number of entries held.
    """
    shift_x = math.floor(x / pitch_um)
    shift_y = math.floor(y / pitch_um)
    sigma = math.sqrt(variance + diffusion_um * drift)
    _shares(x - shift_x * pitch_um, sigma, pitch_um, table, share_x)
    _shares(y - shift_y * pitch_um, sigma, pitch_um, table, share_y)
    energy *= 1.0 - trapping * drift / thickness_um
    before = held
    for i in range(3):
        for j in range(3):
            part = energy * share_x[i] * share_y[j]
            if part < LEAST_KEV:
                continue
            row = shift_x + i
            column = shift_y + j
            place = held
            for k in range(before):
                if pixel[k, 0] == row and pixel[k, 1] == column:
                    place = k
            if place == held:
                pixel[held, 0] = row
                pixel[held, 1] = column
                collected[held] = 0.0
                held += 1
            collected[place] += part
    return held


@njit(nogil=True, cache=True, error_model="numpy")
def collect(
    out: NDArray[np.float64],
    weight: NDArray[np.float64],
    points: NDArray[np.float64],
    mu_in: NDArray[np.float64],
    first_kev: NDArray[np.float64],
    second_kev: NDArray[np.float64],
    mu_second: NDArray[np.float64],
    cosine: NDArray[np.float64],
    third_kev: float,
    mu_third: float,
    variance0: NDArray[np.float64],
    diffusion_um: float,
    thickness_um: float,
    pitch_um: float,
    trapping: float,
    floor_kev: float,
    step_kev: float,
    table: NDArray[np.float64],
) -> None:
    """Add to ``out`` (energy, grid) the events of one interaction channel.

    A photon interacts at a depth drawn from its attenuation, leaves ``first_kev``
    there and sends a photon of ``second_kev`` (0 for none) at ``cosine`` to the
    beam. Where that one is absorbed it sends ``third_kev`` (0 for none) anywhere.
    Clouds are Gaussian; variances add ``variance0`` (per energy) and
    ``diffusion_um`` per um of drift to the far side.

    weight (energy,), points (sample, 8) in [0, 1), mu_in (energy,) and mu_third in
    1/um, first_kev, second_kev, mu_second (1/um), cosine: (energy, sample).
    """
    share_x = np.zeros(3)
    share_y = np.zeros(3)
    pixel = np.zeros((27, 2), np.int64)
    collected = np.zeros(27)
    samples = points.shape[0]
    for e in range(out.shape[0]):
        if weight[e] == 0.0:
            continue
        w = weight[e] / samples
        row = out[e]
        stopped = 1.0 - math.exp(-mu_in[e] * thickness_um)
        for s in range(samples):
            x = points[s, 0] * pitch_um
            y = points[s, 1] * pitch_um
            z = -math.log(1.0 - points[s, 2] * stopped) / mu_in[e]
            held = _add_site(
                0, x, y, thickness_um - z, first_kev[e, s], variance0[e],
                diffusion_um, thickness_um, pitch_um, trapping, table, share_x,
                share_y, pixel, collected,
            )  # fmt: skip
            second = second_kev[e, s]
            if second > 0.0:
                path = -math.log(1.0 - points[s, 4]) / mu_second[e, s]
                z += path * cosine[e, s]
                if 0.0 < z < thickness_um:
                    side = path * math.sqrt(max(0.0, 1.0 - cosine[e, s] ** 2))
                    turn = 2.0 * math.pi * points[s, 3]
                    x += side * math.cos(turn)
                    y += side * math.sin(turn)
                    held = _add_site(
                        held, x, y, thickness_um - z, second - third_kev,
                        variance0[0], diffusion_um, thickness_um, pitch_um, trapping,
                        table, share_x, share_y, pixel, collected,
                    )  # fmt: skip
                    if third_kev > 0.0:
                        path = -math.log(1.0 - points[s, 7]) / mu_third
                        up = 2.0 * points[s, 5] - 1.0
                        z += path * up
                        if 0.0 < z < thickness_um:
                            side = path * math.sqrt(max(0.0, 1.0 - up * up))
                            turn = 2.0 * math.pi * points[s, 6]
                            held = _add_site(
                                held, x + side * math.cos(turn),
                                y + side * math.sin(turn), thickness_um - z,
                                third_kev, variance0[0], diffusion_um, thickness_um,
                                pitch_um, trapping, table, share_x, share_y, pixel,
                                collected,
                            )  # fmt: skip
            for k in range(held):
                if collected[k] > floor_kev:
                    _deposit(row, collected[k], step_kev, w)
