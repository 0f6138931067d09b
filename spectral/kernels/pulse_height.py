"""Compiled sum over sampled two-site events: energies collected by square pixels.

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
def collect(
    out: NDArray[np.float64],
    weight: NDArray[np.float64],
    points: NDArray[np.float64],
    mu_in: NDArray[np.float64],
    first_kev: NDArray[np.float64],
    second_kev: NDArray[np.float64],
    mu_second: NDArray[np.float64],
    cosine: NDArray[np.float64],
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
    beam. Both clouds are Gaussian; variances add ``variance0`` (per energy) and
    ``diffusion_um`` per um of drift to the far side.

    weight (energy,), points (sample, 5) in [0, 1), mu_in (energy,) in 1/um,
    first_kev, second_kev, mu_second (1/um), cosine: (energy, sample).
    """
    share_x = np.zeros(3)
    share_y = np.zeros(3)
    other_x = np.zeros(3)
    other_y = np.zeros(3)
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
            drift = thickness_um - z
            sigma = math.sqrt(variance0[e] + diffusion_um * drift)
            _shares(x, sigma, pitch_um, table, share_x)
            _shares(y, sigma, pitch_um, table, share_y)
            first = first_kev[e, s] * (1.0 - trapping * drift / thickness_um)
            second = second_kev[e, s]
            shift_x = 100
            shift_y = 100
            if second > 0.0:
                path = -math.log(1.0 - points[s, 4]) / mu_second[e, s]
                depth = z + path * cosine[e, s]
                if 0.0 < depth < thickness_um:
                    side = path * math.sqrt(max(0.0, 1.0 - cosine[e, s] ** 2))
                    turn = 2.0 * math.pi * points[s, 3]
                    x2 = x + side * math.cos(turn)
                    y2 = y + side * math.sin(turn)
                    shift_x = int(math.floor(x2 / pitch_um))
                    shift_y = int(math.floor(y2 / pitch_um))
                    drift = thickness_um - depth
                    sigma = math.sqrt(variance0[0] + diffusion_um * drift)
                    _shares(x2 - shift_x * pitch_um, sigma, pitch_um, table, other_x)
                    _shares(y2 - shift_y * pitch_um, sigma, pitch_um, table, other_y)
                    second *= 1.0 - trapping * drift / thickness_um
                else:
                    second = 0.0
            for i in range(3):
                for j in range(3):
                    energy = first * share_x[i] * share_y[j]
                    if second > 0.0:
                        a = i - shift_x
                        b = j - shift_y
                        if 0 <= a < 3 and 0 <= b < 3:
                            energy += second * other_x[a] * other_y[b]
                    if energy > floor_kev:
                        _deposit(row, energy, step_kev, w)
            if second > 0.0:
                for a in range(3):
                    for b in range(3):
                        i = a + shift_x
                        j = b + shift_y
                        if 0 <= i < 3 and 0 <= j < 3:
                            continue
                        energy = second * other_x[a] * other_y[b]
                        if energy > floor_kev:
                            _deposit(row, energy, step_kev, w)
