"""Whether the arrays of a calibration file belong together and hold numbers."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from spectral.calibration.result import Calibration


def part_at_fault(calibration: Calibration) -> str:
    """The first part of a calibration that cannot be, in words; "" if there is none.

    Parameters
    ----------
    calibration : Calibration
        As it came out of a file.
    """
    for name, value, shape in _parts(calibration):
        array = np.asarray(value)
        if array.dtype.kind not in "iuf":
            return f"{name} holds no numbers"
        if array.shape != shape:
            return f"{name} has shape {array.shape} and not {shape}"
        if not np.isfinite(array).all():
            return f"{name} holds numbers that are not finite"
    return ""


def _parts(calibration: Calibration) -> list[tuple[str, Any, tuple[int, ...]]]:
    """Name, content and due shape of every part that decomposing needs."""
    model, residual, steps = calibration.model, calibration.residual, calibration.steps
    m, k = len(calibration.materials), np.size(calibration.thresholds_kev)
    q = k + 3
    pixels = np.shape(calibration.pixel_reasons)
    if len(pixels) != 2:
        return [("pixel_reasons", calibration.pixel_reasons, (0, 0))]
    energies, grid = np.size(model.energy_kev), np.shape(model.heights)[-1:]
    terms, taken = len(np.atleast_1d(residual.powers)), np.size(steps.exposure)
    return [
        ("thresholds_kev", calibration.thresholds_kev, (k,)),
        ("levels_kev", calibration.levels_kev, (k,)),
        ("spread", calibration.spread, (q, q)),
        ("pixel_reasons", calibration.pixel_reasons, pixels),
        ("departures", calibration.departures, (*pixels, q)),
        ("departure_covariance", calibration.departure_covariance, (*pixels, q, q)),
        ("voltage_kv", calibration.voltage_kv, ()),
        ("photons_per_mas", calibration.photons_per_mas, ()),
        ("model/energy_kev", model.energy_kev, (energies,)),
        ("model/spectrum", model.spectrum, (energies,)),
        ("model/attenuation", model.attenuation, (m, energies)),
        ("model/heights", model.heights, (energies, *grid)),
        ("residual/largest", residual.largest, (m,)),
        ("residual/powers", residual.powers, (terms, m)),
        ("residual/coefficient", residual.coefficient, (terms + 2, k)),
        ("residual/covariance", residual.covariance, (k, terms + 2, terms + 2)),
        ("residual/decay", residual.decay, (m,)),
        ("steps/areal_density", steps.areal_density, (taken, m)),
        ("steps/current_ma", steps.current_ma, (taken,)),
    ]
