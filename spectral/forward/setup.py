"""The instrument of a scan as the forward model sees it, with its unknowns."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import ScanError
from spectral.forward.counting_model import CountingModel
from spectral.forward.scan_facts import scan_faults
from spectral.physics.cross_sections import k_edge_kev, mass_attenuation
from spectral.physics.materials import find_material
from spectral.physics.pileup import PulseShape
from spectral.physics.pulse_family import tail_height
from spectral.physics.sensor import (
    PAIR_ENERGY_EV,
    ChargeTransport,
    Sensor,
    pulse_heights,
)
from spectral.physics.spectrum import energy_bins
from spectral.physics.tube import tube_spectrum

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from spectral.physics.materials import Material
    from spectral.scans.scan import Scan

STEP_KEV = 0.5
LEAST_KEV = 10.0
VOLTAGE_MARGIN = 1.03
SUM_MARGIN = 1.7


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Setup:
    """Nominal facts of an instrument.

    Attributes
    ----------
    voltage_kv : float
    filters : tuple of (weight fractions, g/cm2)
    sensor : Sensor
    materials : tuple of Material
        The basis.
    borders_kev, energy_kev : arrays, shapes (energy + 1,) and (energy,)
        Borders lie on the K edges of everything in the beam.
    attenuation : array, shape (material, energy), in cm2/g
    assumptions : tuple of str
        What the scan did not say and was taken instead.
    """

    voltage_kv: float
    filters: tuple[tuple[Mapping[str, float], float], ...]
    sensor: Sensor
    materials: tuple[Material, ...]
    borders_kev: NDArray[np.float64]
    energy_kev: NDArray[np.float64]
    attenuation: NDArray[np.float64]
    assumptions: tuple[str, ...] = ()

    @classmethod
    def from_scan(cls, scan: Scan) -> Setup:
        """Read the instrument off a scan.

        Raises
        ------
        ScanError
            If the scan does not say what the model must know, or something that
            cannot be (`spectral.forward.scan_facts.scan_faults`).
        """
        faults = scan_faults(scan)
        if faults:
            msg = f"{scan.source}: {faults[0]}"
            raise ScanError(msg)
        assumptions = []
        if not scan.filters:
            assumptions.append(
                "no filter is named: only the tube's own window is taken"
            )
        if scan.current_ma is None:
            assumptions.append("no tube current is given: it is taken as constant")
        stuff = find_material(str(scan.sensor_material))
        known = {find_material(name).name: name for name in PAIR_ENERGY_EV}
        if stuff.name not in known:
            assumptions.append(
                f"pair energy and Fano factor of {stuff.name} are taken as CdTe's"
            )
        sensor = Sensor(
            material=known.get(stuff.name, stuff.name),
            weight_fractions=stuff.weight_fractions,
            density_g_cm3=stuff.density_g_cm3,
            thickness_um=1e3 * float(scan.sensor_thickness_mm or 0.0),
            pitch_um=float(np.sqrt(np.prod(scan.pixel_size_um or 0.0))),
        )
        filters = []
        for layer in scan.filters:
            found = find_material(layer.material)
            filters.append(
                (
                    found.weight_fractions,
                    0.1 * layer.thickness_mm * found.density_g_cm3,
                )
            )
        materials = tuple(
            find_material(m.formula or m.name, density_g_cm3=m.density_g_cm3)
            for m in scan.materials
        )
        return cls.build(
            voltage_kv=scan.voltage_kv,
            filters=tuple(filters),
            sensor=sensor,
            materials=materials,
            assumptions=tuple(assumptions),
        )

    @classmethod
    def build(
        cls,
        *,
        voltage_kv: float,
        filters: tuple[tuple[Mapping[str, float], float], ...],
        sensor: Sensor,
        materials: tuple[Material, ...],
        width_kev: float = 1.0,
        assumptions: tuple[str, ...] = (),
    ) -> Setup:
        """Set up the energy grid and the basis' attenuation."""
        top = VOLTAGE_MARGIN * voltage_kv
        elements = {e for f, _ in filters for e in f}
        elements |= {e for m in materials for e in m.weight_fractions}
        elements |= set(sensor.weight_fractions)
        edges = sorted(k for k in map(k_edge_kev, elements) if LEAST_KEV < k < top)
        bins = energy_bins(LEAST_KEV, top, width_kev, edges_kev=edges)
        borders, centre = bins.borders_kev, bins.centres_kev
        attenuation = np.array(
            [mass_attenuation(m.weight_fractions, centre) for m in materials]
        )
        return cls(
            voltage_kv=voltage_kv,
            filters=filters,
            sensor=sensor,
            materials=materials,
            borders_kev=borders,
            energy_kev=centre,
            attenuation=attenuation,
            assumptions=assumptions,
        )

    @property
    def grid(self) -> int:
        """Points of the pulse-height grid: it holds sums of two large pulses."""
        return int(np.ceil(SUM_MARGIN * VOLTAGE_MARGIN * self.voltage_kv / STEP_KEV))

    def spectrum(self, values: Mapping[str, float]) -> NDArray[np.float64]:
        """Photons of the open beam by energy, adding up to 1."""
        raw = tube_spectrum(
            self.voltage_kv * float(np.exp(values["ln_voltage"])),
            self.borders_kev,
            anode_angle_deg=float(np.exp(values["ln_anode_angle"])),
        )
        path = (
            0.1
            * 2.699
            * values["extra_filter_mm_al"]
            * mass_attenuation({"Al": 1.0}, self.energy_kev)
        )
        for fractions, areal in self.filters:
            path = path + areal * mass_attenuation(fractions, self.energy_kev)
        passed = raw * np.exp(-path)
        return np.asarray(passed / passed.sum())

    def heights(
        self, values: Mapping[str, float], *, samples: int = 2048
    ) -> NDArray[np.float64]:
        """Pulse heights per photon, shape (energy, grid)."""
        sensor = Sensor(
            material=self.sensor.material,
            weight_fractions=self.sensor.weight_fractions,
            density_g_cm3=self.sensor.density_g_cm3,
            thickness_um=self.sensor.thickness_um * np.exp(values["ln_thickness"]),
            pitch_um=self.sensor.pitch_um,
        )
        charge = ChargeTransport(
            initial_um=np.exp(values["ln_initial_cloud"]),
            diffusion_um=np.exp(values["ln_diffusion"]),
            trapping=values["trapping"],
            fluorescence=np.exp(values["ln_fluorescence"]),
        )
        return pulse_heights(
            sensor,
            charge,
            self.energy_kev,
            step_kev=STEP_KEV,
            grid=self.grid,
            samples=samples,
        )

    def model(
        self,
        values: Mapping[str, float],
        *,
        heights: NDArray[np.float64] | None = None,
        samples: int = 2048,
    ) -> CountingModel:
        """Counting model at given values of the unknowns."""
        if heights is None:
            heights = self.heights(values, samples=samples)
        return CountingModel(
            energy_kev=self.energy_kev,
            spectrum=self.spectrum(values),
            attenuation=self.attenuation,
            heights=heights,
            step_kev=STEP_KEV,
            noise_kev=float(np.exp(values["ln_noise"])),
            shape=PulseShape(
                dead_time_ns=float(np.exp(values["ln_dead_time"])),
                tail_ns=float(np.exp(values["ln_tail"])),
                tail_height=tail_height(float(np.exp(values["ln_order"]))),
            ),
        )
