"""What the forward model must know of a scan, and what of it cannot be."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.physics.materials import find_material
from spectral.physics.tube import HIGHEST_KV, LOWEST_KV

if TYPE_CHECKING:
    from collections.abc import Iterator

    from spectral.scans.scan import Scan

SENSOR_MM = (0.01, 20.0)
PITCH_UM = (5.0, 10_000.0)
LEAST_LIGHT = 1e-6
"""A filtration that lets less through at its best energy leaves nothing to count."""
SAME_SHAPE = 1e-3
"""Share by which a material must differ from any mixture of the others."""


def scan_faults(scan: Scan) -> tuple[str, ...]:
    """Why the response to a scan's beam cannot be modelled, one sentence a reason.

    Each sentence names the field and the mend; none if all is well.

    Parameters
    ----------
    scan : Scan
        Its counts are not read.
    """
    faults = [*_tube(scan), *_sensor(scan), *_substances(scan)]
    if not faults:
        faults += [*_filtration(scan), *_basis(scan)]
    return tuple(faults)


def _tube(scan: Scan) -> Iterator[str]:
    if scan.target_material not in {"W", ""}:
        yield (
            f"target_material is {scan.target_material!r}; the tube model knows "
            "tungsten (W) only"
        )
    if not LOWEST_KV <= scan.voltage_kv <= HIGHEST_KV:
        yield (
            f"voltage is {scan.voltage_kv:g} kV; the tube model goes from "
            f"{LOWEST_KV:g} to {HIGHEST_KV:g} kV: is it right?"
        )
    beyond = scan.thresholds_kev[scan.thresholds_kev >= scan.voltage_kv]
    if beyond.size:
        yield (
            f"threshold_energy {beyond[0]:g} keV is not below the tube's voltage, "
            f"{scan.voltage_kv:g} kV, so no photon reaches it; correct one of them, or "
            "leave that threshold out"
        )


def _sensor(scan: Scan) -> Iterator[str]:
    thickness, size = scan.sensor_thickness_mm, scan.pixel_size_um
    if scan.sensor_material is None or thickness is None:
        yield (
            "sensor_material and sensor_thickness are needed to model the response; "
            "add them to the detector group"
        )
    elif not SENSOR_MM[0] <= thickness <= SENSOR_MM[1]:
        yield (
            f"sensor_thickness is {thickness:g} mm; sensors have {SENSOR_MM[0]:g} to "
            f"{SENSOR_MM[1]:g} mm: is its unit right?"
        )
    if size is None:
        yield (
            "x_pixel_size and y_pixel_size are needed to model charge sharing; add "
            "them to the detector group"
        )
    elif min(size) < PITCH_UM[0] or max(size) > PITCH_UM[1]:
        yield (
            f"x_pixel_size and y_pixel_size are {size[1]:g} and {size[0]:g} um; pixels "
            f"have {PITCH_UM[0]:g} to {PITCH_UM[1]:g} um: is their unit right?"
        )


def _substances(scan: Scan) -> Iterator[str]:
    """Names and formulas that mean nothing."""
    named: list[tuple[str, str, float | None]] = [
        (f"material of filter {i}", f.material, None)
        for i, f in enumerate(scan.filters, start=1)
    ]
    if scan.sensor_material is not None:
        named.append(("sensor_material", scan.sensor_material, None))
    named += [
        (f"formula of {m.name}", m.formula or m.name, m.density_g_cm3)
        for m in scan.materials
    ]
    for field, text, density in named:
        try:
            find_material(text, density_g_cm3=density)
        except InputError as error:
            yield f"{field}: {error}"


def _filtration(scan: Scan) -> Iterator[str]:
    """Filters that let nothing through."""
    energy = np.arange(max(10.0, scan.thresholds_kev[0]), scan.voltage_kv, 1.0)
    path = np.zeros_like(energy)
    for layer in scan.filters:
        found = find_material(layer.material)
        areal = found.areal_density(layer.thickness_mm)
        path += areal * found.mass_attenuation(energy)
    if energy.size and np.exp(-path.min()) < LEAST_LIGHT:
        listed = ", ".join(f"{f.material} {f.thickness_mm:g} mm" for f in scan.filters)
        yield (
            f"the filters ({listed}) let through less than {LEAST_LIGHT:g} of any "
            "photon counted; are their thicknesses and units right?"
        )


def _basis(scan: Scan) -> Iterator[str]:
    """Materials that no energy resolution tells apart."""
    names = [m.name for m in scan.materials]
    if len(names) > scan.thresholds_kev.size:
        yield (
            f"{scan.thresholds_kev.size} thresholds cannot tell {len(names)} materials "
            "apart; as many thresholds as materials are needed"
        )
        return
    energy = np.arange(max(10.0, scan.thresholds_kev[0]), scan.voltage_kv, 1.0)
    if len(names) < 2 or energy.size < len(names):
        return
    shapes = np.array(
        [
            find_material(
                m.formula or m.name, density_g_cm3=m.density_g_cm3
            ).mass_attenuation(energy)
            for m in scan.materials
        ]
    )
    for j, shape in enumerate(shapes):
        others = np.delete(shapes, j, axis=0).T
        mixture = others @ np.linalg.lstsq(others, shape, rcond=None)[0]
        differs = np.linalg.norm(shape - mixture) / np.linalg.norm(shape)
        if differs < SAME_SHAPE:
            rest = " and ".join(names[:j] + names[j + 1 :])
            yield (
                f"{names[j]} attenuates like {rest} to {100 * differs:.2g} % from "
                f"{energy[0]:g} to {energy[-1]:g} keV, so counts cannot tell them "
                "apart; leave one out, or take one with a K edge in the beam"
            )
            return
