"""Counts above a threshold near a landmark: a tabulated shape, moved and scaled."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtr

from spectral.calibration.threshold_scan.landmarks import EDGE

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.threshold_scan.landmarks import Landmark
    from spectral.calibration.threshold_scan.source_photons import PulseDensity

SHIFT, LN_WIDTH, LN_HEIGHT, FIRST_TERM = 0, 1, 2, 3
"""Places of the parameters: landmark found minus expected in keV, noise, height."""
CLOUD = FIRST_TERM
"""Place of the change with ln of the charge clouds' variance."""
LN_WIDTH_GRID = np.log(0.25) + 0.08 * np.arange(46)
REACH_KEV = 30.0
NORM_KEV = 4.0
"""The shape is 1 this far below the landmark."""
POWERS = 2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CurveTable:
    """Shape of a counting curve near one landmark, by distance and noise.

    Attributes
    ----------
    landmark : Landmark
    first_kev, step_kev : float, in keV
        Grid of the threshold's distance above the landmark.
    cells : array, shape (distance, width, 3 x (1 + terms))
        Shape and additional terms; minus their slopes by distance; their slopes by
        ln width.
    cloud : float
        ln of the clouds' variance over the sensor's description, that the shape has.
    """

    landmark: Landmark
    first_kev: float
    step_kev: float
    cells: NDArray[np.float64]
    cloud: float = 0.0

    @property
    def terms(self) -> int:
        """Tabulated terms beside the shape: the cloud, and of an edge its contrast."""
        return int(self.cells.shape[2]) // 3 - 1

    @property
    def parameters(self) -> int:
        """Shift, ln width, ln height, terms, then a constant and a slope per keV."""
        return FIRST_TERM + self.terms + POWERS


def curve_table(
    landmark: Landmark,
    density: PulseDensity,
    smaller: PulseDensity,
    larger: PulseDensity,
    *,
    cloud_step: float,
    cloud: float = 0.0,
) -> CurveTable:
    """Table from the pulse heights that a source leaves in the sensor.

    Parameters
    ----------
    landmark : Landmark
    density, smaller, larger : PulseDensity
        Of the expected charge clouds, and of smaller and larger ones.
    cloud_step : float
        ln of the larger (and of one over the smaller) clouds' variance, relative.
    cloud : float
        ln of the expected clouds' variance over the sensor's description.

    Notes
    -----
    An edge's contrast is the integral of the normal tail, w [phi(z) - z Q(z)]: what
    one keV-1 more of photons below the edge adds.
    """
    step = float(density.height_kev[1])
    level = density.height_kev
    u = level - landmark.energy_kev
    near = np.abs(u) <= REACH_KEV
    width = np.exp(LN_WIDTH_GRID)
    shape = np.maximum(_above(density.pulses, step, width), 0.0)
    norm = float(np.interp(-NORM_KEV, u, shape[:, 0]))
    change = _above(larger.pulses - smaller.pulses, step, width) / (2.0 * cloud_step)
    tables = [shape / norm, change / norm]
    if landmark.order == EDGE:
        z = u[:, None] / width
        normal = np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi)
        tables.append(width * (normal - z * ndtr(-z)))
    values = np.stack(tables, axis=2)
    falling = -np.gradient(values, step, axis=0)
    widened = np.gradient(values, LN_WIDTH_GRID, axis=1)
    cells = np.concatenate([values, falling, widened], axis=2)[near]
    return CurveTable(
        landmark=landmark,
        first_kev=float(u[near][0]),
        step_kev=step,
        cells=np.ascontiguousarray(cells),
        cloud=cloud,
    )


def _above(
    pulses: NDArray[np.float64], step_kev: float, width_kev: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Pulses above each level of the height grid, shape (level, width)."""
    n = pulses.size
    distance = step_kev * np.arange(-n + 1, n)
    out = np.empty((n, width_kev.size))
    for j, width in enumerate(width_kev):
        passed = ndtr(-distance / width)  # by level minus height
        size = 2 * distance.size
        product = np.fft.rfft(passed, size) * np.fft.rfft(pulses, size)
        out[:, j] = np.fft.irfft(product, size)[n - 1 : 2 * n - 1]
    return out


def landmark_curve(
    table: CurveTable, e_kev: NDArray[np.float64], values: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    r"""Expected counts and their derivatives.

    Parameters
    ----------
    table : CurveTable
    e_kev : array, shape (setting,) or (pixel, setting), in keV
        Roughly known energy of each setting, less the landmark's.
    values : array, shape (pixel, parameter)

    Returns
    -------
    counts : array, shape (pixel, setting)
    slopes : array, shape (pixel, parameter, setting)

    Notes
    -----
    :math:`N = e^{a} [F(u, w) + \sum_j t_j G_j(u, w) + c + l u]`, :math:`u = e -
    \delta`; F and G are read bilinearly.
    """
    u = e_kev - values[:, SHIFT, None]
    read = _read(table, u, values[:, LN_WIDTH])
    terms = table.terms
    weight = np.concatenate(
        [np.ones((len(values), 1)), values[:, FIRST_TERM : FIRST_TERM + terms]], axis=1
    )
    constant = values[:, -2, None]
    slope = values[:, -1, None]
    parts = [read[..., k * (1 + terms) : (k + 1) * (1 + terms)] for k in range(3)]
    shape, falling, widened = (
        np.matmul(part, weight[:, :, None])[..., 0] for part in parts
    )
    shape = shape + constant + slope * u
    height = np.exp(values[:, LN_HEIGHT])[:, None]
    tabulated = [parts[0][..., j] for j in range(1, terms + 1)]
    slopes = np.stack(
        [falling - slope, widened, shape, *tabulated, np.ones_like(u), u], axis=1
    )
    return height * shape, height[..., None] * slopes


def _read(
    table: CurveTable, u_kev: NDArray[np.float64], ln_width: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Cells at distances (pixel, setting) and noises (pixel,); ends are held."""
    rows, columns, size = table.cells.shape
    place = np.clip((u_kev - table.first_kev) / table.step_kev, 0.0, rows - 1.001)
    row = place.astype(np.int64)
    x = (place - row)[..., None]
    across = (ln_width - LN_WIDTH_GRID[0]) / (LN_WIDTH_GRID[1] - LN_WIDTH_GRID[0])
    across = np.clip(across, 0.0, columns - 1.001)
    column = across.astype(np.int64)
    y = (across - column)[:, None, None]
    flat = table.cells.reshape(-1, size)
    at = row * columns + column[:, None]
    low = flat[at] * (1.0 - y) + flat[at + 1] * y
    high = flat[at + columns] * (1.0 - y) + flat[at + columns + 1] * y
    return np.asarray(low + x * (high - low))
