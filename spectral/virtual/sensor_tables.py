"""Tables that the transport of single photons reads: what one sensor does to them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.physics.cross_sections import (
    k_edge_kev,
    k_fluorescence_yield,
    k_jump_ratio,
    k_lines,
    mass_attenuation,
)
from spectral.physics.materials import find_material
from spectral.virtual.charge_cloud import (
    ELEMENTARY_CHARGE_C,
    cloud_size_um,
    electron_range_um,
)

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from spectral.virtual.detector import VirtualSensor

LOWEST_KEV = 1.0
HIGHEST_KEV = 200.0
STEP_KEV = 0.1
STAY_KEV = 1.5
"""A photon below this energy is absorbed where it is: it would go a few um at most."""
CLOUD_STEP_KEV = 1.0
COSINE_STEP_KEV = 1.0
COSINE_CELLS = 256
DRIFT_CELLS = 400
ELECTRON_REST_KEV = 510.99895
"""CODATA 2018."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SensorTables:
    """Arguments of `spectral.kernels.photon_transport.transport`, as it names them."""

    slab: NDArray[np.float64]
    grid: NDArray[np.float64]
    attenuation: NDArray[np.float64]
    photo_share: NDArray[np.float64]
    line_reach: NDArray[np.float64]
    line_kev: NDArray[np.float64]
    cosines: NDArray[np.float64]
    cloud_um: NDArray[np.float64]
    collected: NDArray[np.float64]


def sensor_tables(sensor: VirtualSensor) -> SensorTables:
    """All tables of a sensor.

    Notes
    -----
    Coherent scattering is left out: it deposits nothing and turns the photon little.
    L and weaker lines are absorbed where they arise.
    """
    fractions = find_material(
        sensor.material, density_g_cm3=sensor.density_g_cm3
    ).weight_fractions
    energy = np.arange(LOWEST_KEV, HIGHEST_KEV + 0.5 * STEP_KEV, STEP_KEV)
    photo = mass_attenuation(fractions, energy, process="photo")
    compton = mass_attenuation(fractions, energy, process="incoherent")
    line_kev, line_reach = _lines(fractions, energy, photo)
    drift = np.linspace(0.0, sensor.thickness_um, DRIFT_CELLS + 1)
    slab = np.array(
        [
            sensor.thickness_um,
            sensor.pitch_um,
            0.5 * sensor.gap_um,
            sensor.gap_loss,
            sensor.fano * sensor.pair_energy_ev * 1e-3,
            CLOUD_STEP_KEV,
            drift[1],
        ]
    )
    return SensorTables(
        slab=slab,
        grid=np.array([LOWEST_KEV, STEP_KEV, COSINE_STEP_KEV, STAY_KEV]),
        attenuation=(photo + compton) * sensor.density_g_cm3 * 1e-4,
        photo_share=photo / (photo + compton),
        line_reach=line_reach,
        line_kev=line_kev,
        cosines=_compton_cosines(),
        cloud_um=_clouds(sensor, fractions, drift),
        collected=_collected(sensor, drift),
    )


def _lines(
    fractions: Mapping[str, float],
    energy: NDArray[np.float64],
    photo: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """K lines (line,), and running sum of their emission probability (line, energy).

    Per photoabsorption: share of the element, times 1 - 1/jump above its edge, times
    yield, times the line's share of the series.
    """
    lines: list[float] = []
    emission: list[NDArray[np.float64]] = []
    for element, weight in fractions.items():
        if k_edge_kev(element) < STAY_KEV:
            continue
        own = weight * mass_attenuation({element: 1.0}, energy, process="photo") / photo
        in_k = np.where(
            energy > k_edge_kev(element), 1.0 - 1.0 / k_jump_ratio(element), 0.0
        )
        for line, share in k_lines(element):
            lines.append(line)
            emission.append(own * in_k * k_fluorescence_yield(element) * share)
    if not lines:
        return np.empty(0), np.empty((0, energy.size))
    return np.array(lines), np.cumsum(emission, axis=0)


def _compton_cosines() -> NDArray[np.float64]:
    """Cosine of the scattering angle by energy and quantile, free electrons at rest.

    Source: O. Klein, Y. Nishina, Z. Phys. 52 (1929) 853.
    """
    energy = np.arange(0.0, HIGHEST_KEV + 1.0, COSINE_STEP_KEV)[:, None]
    cosine = np.linspace(-1.0, 1.0, 2001)
    kept = 1.0 / (1.0 + energy / ELECTRON_REST_KEV * (1.0 - cosine))
    density = kept**2 * (kept + 1.0 / kept - (1.0 - cosine**2))
    cells = 0.5 * (density[:, 1:] + density[:, :-1])
    reached = np.concatenate([np.zeros_like(energy), np.cumsum(cells, axis=1)], axis=1)
    wanted = np.linspace(0.0, 1.0, COSINE_CELLS + 1)
    return np.array([np.interp(wanted, row / row[-1], cosine) for row in reached])


def _clouds(
    sensor: VirtualSensor, fractions: Mapping[str, float], drift: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Cloud size in um, shape (energy, drift), energies from 0 in equal steps."""
    energy = np.arange(0.0, HIGHEST_KEV + 1.0, CLOUD_STEP_KEV)
    track = electron_range_um(fractions, sensor.density_g_cm3, energy)
    return cloud_size_um(
        np.hypot(sensor.fresh_cloud_um, sensor.track_share * track),
        energy * 1e3 / sensor.pair_energy_ev * ELEMENTARY_CHARGE_C,
        drift,
        field_v_per_um=sensor.bias_v / sensor.thickness_um,
        temperature_k=sensor.temperature_k,
        relative_permittivity=sensor.relative_permittivity,
    )


def _collected(
    sensor: VirtualSensor, drift: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Collected charge by drift length, relative to a deposit at the lit face.

    Notes
    -----
    exp(-h / (mobility-lifetime product x field)), carriers of one sign under small
    pixels. Source: K. Hecht, Z. Phys. 77 (1932) 235 (trapping at a constant rate).
    """
    field_v_per_um = sensor.bias_v / sensor.thickness_um
    free_um = sensor.mobility_lifetime_cm2_per_v * 1e8 * field_v_per_um
    return np.exp((sensor.thickness_um - drift) / free_um)
