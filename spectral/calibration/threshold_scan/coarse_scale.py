"""First guess of the energy scale, and of where each pixel's landmark lies."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.signal import find_peaks

from spectral.calibration.threshold_scan.landmark_curve import (
    LN_HEIGHT,
    SHIFT,
    landmark_curve,
)
from spectral.calibration.threshold_scan.landmarks import LINE
from spectral.errors import CalibrationError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.threshold_scan.landmark_curve import CurveTable
    from spectral.calibration.threshold_scan.landmarks import Landmark

NOMINAL_REACH_KEV = 6.0
"""How far a nominal scale may be wrong at a line."""
PIXEL_REACH_KEV = 8.0
"""How far a pixel's landmark is looked for from the average one."""
PIXEL_STEP_KEV = 0.25
AROUND_KEV = 12.0


def coarse_scale(
    settings: list[NDArray[np.float64]],
    mean_counts: list[NDArray[np.float64]],
    landmarks: list[Landmark],
    nominal: tuple[float, float] | None,
) -> tuple[float, float]:
    """Offset in keV and gain in keV per unit of setting, of the average pixel.

    Parameters
    ----------
    settings, mean_counts : lists of arrays, shape (setting,), one a scan
        Settings in an order in which the energy rises.
    landmarks : list of Landmark
    nominal : (keV at setting 0, keV per unit), or None

    Raises
    ------
    CalibrationError
        If there is no nominal scale and fewer than two lines, or lines are found in
        the wrong order.
    """
    lines = [j for j, mark in enumerate(landmarks) if mark.order == LINE]
    if nominal is None and len({landmarks[j].energy_kev for j in lines}) < 2:
        msg = (
            "the energy scale cannot be guessed from fewer than two lines; give "
            "nominal_scale in the file (keV at setting 0, keV per unit)"
        )
        raise CalibrationError(msg)
    if not lines and nominal is not None:
        return nominal
    place = []
    for j in lines:
        expected = None
        if nominal is not None:
            offset, gain = nominal
            expected = (landmarks[j].energy_kev - offset) / gain
            reach = NOMINAL_REACH_KEV / abs(gain)
        else:
            reach = np.inf
        place.append(_steepest(settings[j], mean_counts[j], expected, reach))
    energy = np.array([landmarks[j].energy_kev for j in lines])
    if any(p is None for p in place):
        missing = landmarks[lines[place.index(None)]].name
        msg = f"the mean counts show no step for {missing}; scan a wider range"
        raise CalibrationError(msg)
    found = np.array(place, dtype=np.float64)
    if np.unique(energy).size < 2:
        offset, gain = nominal or (0.0, 1.0)
        return float(np.mean(energy - gain * found)), gain
    gain, offset = np.polyfit(found, energy, 1)
    left = energy - (offset + gain * found)
    limit = 0.35 * np.ptp(energy)
    rises = np.sign(settings[lines[0]][-1] - settings[lines[0]][0])
    if gain * rises <= 0.0 or np.abs(left).max() > limit:
        msg = (
            "the steps of the mean counts do not follow the order of the lines "
            f"({', '.join(landmarks[j].name for j in lines)}); check which file "
            "holds which source"
        )
        raise CalibrationError(msg)
    return float(offset), float(gain)


def _steepest(
    setting: NDArray[np.float64],
    counts: NDArray[np.float64],
    expected: float | None,
    reach: float,
) -> float | None:
    """Setting at the most prominent peak of minus the slope of the counts."""
    middle = 0.5 * (setting[1:] + setting[:-1])
    density = -np.diff(counts) / np.abs(np.diff(setting))
    padded = np.pad(density, 1, "edge")
    density = 0.25 * padded[:-2] + 0.5 * padded[1:-1] + 0.25 * padded[2:]
    peaks, facts = find_peaks(density, prominence=0.0)
    if expected is not None:
        near = np.abs(middle[peaks] - expected) <= reach
        peaks, prominence = peaks[near], facts["prominences"][near]
    else:
        prominence = facts["prominences"]
    if peaks.size == 0:
        return None
    return float(middle[peaks[np.argmax(prominence)]])


def pixel_shifts(
    table: CurveTable,
    e_kev: NDArray[np.float64],
    counts: NDArray[np.float64],
    average: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Rough shift in keV and ln height of each pixel's curve against the average.

    Parameters
    ----------
    table : CurveTable
    e_kev : array, shape (setting,), in keV
    counts : array, shape (pixel, setting)
    average : array, shape (parameter,)
        Of the average pixel.

    Notes
    -----
    For each shift of a grid, the average curve and a constant are fitted by weighted
    least squares; the shift that leaves least is taken.
    """
    near = np.abs(e_kev) <= AROUND_KEV
    e, y = e_kev[near], counts[:, near]
    moves = np.arange(-PIXEL_REACH_KEV, PIXEL_REACH_KEV + 1e-9, PIXEL_STEP_KEV)
    values = np.tile(average, (moves.size, 1))
    values[:, SHIFT] += moves
    values[:, LN_HEIGHT] = 0.0
    curve, _ = landmark_curve(table, e, values)
    typical, _ = landmark_curve(table, e, average[None])
    weight = 1.0 / np.maximum(typical[0], 1.0)
    weight /= weight.sum()
    mean_y, mean_c = y @ weight, curve @ weight
    centred = (curve - mean_c[:, None]) * weight
    cross = (y - mean_y[:, None]) @ centred.T
    own = np.sum(centred * (curve - mean_c[:, None]), axis=1)
    explained = np.where(cross > 0.0, cross**2 / own, 0.0)
    best = np.argmax(explained, axis=1)
    height = np.take_along_axis(cross / own, best[:, None], axis=1)[:, 0]
    return average[SHIFT] + moves[best], np.log(np.maximum(height, 1e-3))
