"""Photons of a source, and what the sensor makes of them above each threshold."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.threshold_scan.landmarks import NUCLIDE_LINES
from spectral.physics.cross_sections import k_edge_kev, k_lines
from spectral.physics.materials import find_material
from spectral.physics.sensor import ChargeTransport, Sensor, pulse_heights
from spectral.physics.spectrum import energy_bins
from spectral.physics.tube import tube_spectrum

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.scans.threshold_scan import LineSource, ThresholdScan

HEIGHT_STEP_KEV = 0.1
LINE_SAMPLES = 16384
TUBE_SAMPLES = 1024
TUBE_BIN_KEV = 0.25
LEAST_KEV = 5.0
ABOVE_KEV = 25.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PulseDensity:
    """Pulses of each height that a source leaves in a pixel, per photon.

    Attributes
    ----------
    height_kev : array, shape (height,), in keV
    pulses : array, shape (height,)
    """

    height_kev: NDArray[np.float64]
    pulses: NDArray[np.float64]


def sensor_of(scan: ThresholdScan) -> Sensor | None:
    """Sensor that the scan describes, None where it says too little."""
    if (
        scan.sensor_material is None
        or scan.sensor_thickness_mm is None
        or scan.pixel_size_um is None
    ):
        return None
    stuff = find_material(scan.sensor_material)
    return Sensor(
        material=stuff.name,
        weight_fractions=stuff.weight_fractions,
        density_g_cm3=stuff.density_g_cm3,
        thickness_um=1e3 * scan.sensor_thickness_mm,
        pitch_um=float(np.sqrt(np.prod(scan.pixel_size_um))),
    )


def source_photons(
    source: LineSource,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Energies in keV and shares of the photons that a source sends."""
    if source.kind == "fluorescence target":
        lines = k_lines(source.emitter)
        return np.array([e for e, _ in lines]), np.array([s for _, s in lines])
    if source.kind == "radionuclide":
        lines = NUCLIDE_LINES[source.emitter]
        return np.array([e for e, _ in lines]), np.array([s for _, s in lines])
    voltage = float(source.voltage_kv or 0.0)
    layers = [(find_material(f.material), f.thickness_mm) for f in source.filters]
    elements = {e for m, _ in layers for e in m.weight_fractions} | {"W"}
    edges = sorted(
        k for k in map(k_edge_kev, elements) if LEAST_KEV + 1.0 < k < voltage - 1.0
    )
    bins = energy_bins(LEAST_KEV, voltage, TUBE_BIN_KEV, edges_kev=edges)
    photons = tube_spectrum(voltage, bins.borders_kev)
    for material, thickness in layers:
        path = material.areal_density(thickness)
        photons = photons * np.exp(-path * material.mass_attenuation(bins.centres_kev))
    return bins.centres_kev, photons / photons.sum()


def pulse_density(
    source: LineSource, sensor: Sensor, charge: ChargeTransport
) -> PulseDensity:
    """Pulses of all heights that a source leaves in a pixel of a sensor.

    The height of charge from the lit face is the energy left there: of charge from
    deeper down less is trapped, so it counts for more.
    """
    energy, share = source_photons(source)
    grid = _grid(energy)
    heights = pulse_heights(
        sensor,
        charge,
        energy,
        step_kev=HEIGHT_STEP_KEV,
        grid=grid,
        samples=LINE_SAMPLES if energy.size < 20 else TUBE_SAMPLES,
    )
    return PulseDensity(
        height_kev=_levels(grid) / (1.0 - charge.trapping),
        pulses=share @ heights,
    )


def bare_density(source: LineSource, shared: float) -> PulseDensity:
    """Pulses of lines whose sensor is unknown, with an even tail below each.

    Parameters
    ----------
    source : LineSource
    shared : float
        Pulses in the tail per pulse of full energy.
    """
    energy, share = source_photons(source)
    height = _levels(_grid(energy))
    pulses = np.zeros(height.size)
    for e, weight in zip(energy, share, strict=True):
        place = e / HEIGHT_STEP_KEV
        cell = int(place)
        pulses[cell] += weight * (1.0 - (place - cell))
        pulses[cell + 1] += weight * (place - cell)
        pulses[:cell] += weight * shared / cell
    return PulseDensity(height_kev=height, pulses=pulses)


def _levels(grid: int) -> NDArray[np.float64]:
    """Heights of the grid, in keV."""
    return np.asarray(HEIGHT_STEP_KEV * np.arange(grid), np.float64)


def _grid(energy_kev: NDArray[np.float64]) -> int:
    """Points of the height grid: past the highest energy and its noise."""
    return int(np.ceil((energy_kev.max() + ABOVE_KEV) / HEIGHT_STEP_KEV)) + 1
