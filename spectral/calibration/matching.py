"""Whether a calibration belongs to a scan's, or another calibration's, setting."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

import numpy as np

from spectral.errors import InputError
from spectral.physics.materials import find_material

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Layer, Scan

THRESHOLD_TOLERANCE_KEV = 0.01
VOLTAGE_TOLERANCE_KV = 0.1
DENSITY_TOLERANCE = 1e-3
MOST_CURRENTS = 1e3
"""Between a scan's current and the calibration's largest: more is a wrong unit."""


class _Setting(Protocol):
    """What calibrations and scans both say of themselves."""

    @property
    def materials(self) -> tuple[Layer, ...]: ...

    @property
    def thresholds_kev(self) -> NDArray[np.float64]: ...

    @property
    def voltage_kv(self) -> float: ...


def scan_differs(calibration: Calibration, scan: Scan, *, layers: bool = True) -> str:
    """What keeps a scan from a calibration's setting, in words; "" if nothing.

    Parameters
    ----------
    calibration : Calibration
    scan : Scan
    layers : bool
        Whether the scan's layers are looked at, and so must be of the same materials.
    """
    rows, columns = scan.shape[2:]
    return (
        _pixels_differ((rows, columns), calibration.shape)
        or _setting_differs(scan, calibration)
        or (_materials_differ(scan, calibration) if layers else "")
        or _filters_differ(_filters(scan), calibration.filters)
        or _beam_differs(calibration, scan)
    )


def calibrations_differ(new: Calibration, old: Calibration) -> str:
    """What keeps two calibrations from being compared, in words; "" if nothing."""
    return (
        _pixels_differ(new.shape, old.shape)
        or _setting_differs(new, old)
        or _materials_differ(new, old)
        or _filters_differ(new.filters, old.filters)
    )


def _beam_differs(calibration: Calibration, scan: Scan) -> str:
    """What of tube, sensor and currents cannot be the calibration's; "" if nothing.

    Parameters
    ----------
    calibration : Calibration
    scan : Scan
        Facts that it does not give are not compared.
    """
    if scan.target_material not in {"W", ""}:
        return f"has the target {scan.target_material} and not W"
    sensor = calibration.sensor.split(",")[0]
    if scan.sensor_material is not None and not _same_substance(
        scan.sensor_material, sensor
    ):
        return f"has a sensor of {scan.sensor_material} and not of {sensor}"
    if scan.current_ma is None:
        return ""
    top = calibration.largest_current_ma
    for i, (role, current) in enumerate(zip(scan.role, scan.current_ma, strict=True)):
        if role != "dark" and not top / MOST_CURRENTS <= current <= top * MOST_CURRENTS:
            return (
                f"has a tube current of {current:g} mA in exposure {i} ({role}) and "
                f"not one like {top:g} mA (is the scan's own current right?)"
            )
    return ""


def _same_substance(one: str, other: str) -> bool:
    if one == other:
        return True
    try:
        return find_material(one).name == find_material(other).name
    except InputError:
        return False


def _filters(scan: Scan) -> tuple[str, ...]:
    return tuple(f"{f.material} {f.thickness_mm:g} mm" for f in scan.filters)


def _pixels_differ(one: tuple[int, int], other: tuple[int, int]) -> str:
    if one == other:
        return ""
    return (
        f"has {one[0]} x {one[1]} pixels (rows x columns) and not "
        f"{other[0]} x {other[1]}"
    )


def _setting_differs(one: _Setting, other: _Setting) -> str:
    first, second = one.thresholds_kev, other.thresholds_kev
    if first.size != second.size:
        return f"has {first.size} thresholds and not {second.size}"
    if np.abs(first - second).max() > THRESHOLD_TOLERANCE_KEV:
        return f"has thresholds at {_energies(first)} and not at {_energies(second)}"
    if abs(one.voltage_kv - other.voltage_kv) > VOLTAGE_TOLERANCE_KV:
        return f"was taken at {one.voltage_kv:g} kV and not at {other.voltage_kv:g} kV"
    return ""


def _materials_differ(one: _Setting, other: _Setting) -> str:
    if _same_materials(one.materials, other.materials):
        return ""
    named = _names(one.materials) or "no material"
    return f"is of {named} and not of {_names(other.materials)}"


def _same_materials(one: tuple[Layer, ...], other: tuple[Layer, ...]) -> bool:
    return len(one) == len(other) and all(
        (a.formula or a.name) == (b.formula or b.name)
        and abs(a.density_g_cm3 - b.density_g_cm3) <= DENSITY_TOLERANCE
        for a, b in zip(one, other, strict=True)
    )


def _filters_differ(one: tuple[str, ...], other: tuple[str, ...]) -> str:
    if not one or not other or sorted(one) == sorted(other):
        return ""
    return f"has the filters {', '.join(one)} and not {', '.join(other)}"


def _energies(values: NDArray[np.float64]) -> str:
    return f"{', '.join(f'{v:g}' for v in values)} keV"


def _names(materials: tuple[Layer, ...]) -> str:
    return " and ".join(
        f"{m.name} ({m.formula}, {m.density_g_cm3:g} g/cm3)" for m in materials
    )
