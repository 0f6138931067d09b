"""A scan that a script describes, counted by a virtual detector, and its truth.

Under ``[virtual]`` the script says what the simulator must know and a laboratory
would not::

    [virtual]
    detector = "detector.toml"    # by default the one that [detector] uses
    photons_per_mas = 25000       # photons per mA s upon a pixel in the open beam
    seed = 1                      # of the photons and the tube's output
    detector_seed = 11            # of the pixels; the same detector in every scan
    drift_step = 0.0005           # and the other fields of the virtual tube
    heel = 0.02
    rows = 32                     # by default those of [detector]
    columns = 48
    bad_pixels = false            # true: those of the detector's description
    neighbours_together = false   # true: neighbours count the same photons

    [[virtual.material]]          # stands in the beam, but not in the scan's basis
    name = "steel"
    formula = "stainless steel 304"
    density_g_cm3 = 8.0

    [[virtual.fault]]             # what the scan's own list of exposures hides
    exposure = 12                 # or [12, 15], or step = "PMMA 8"; all if absent
    threshold_drift_kev = 0.4
    row_mm = [0.0, 1.0]           # where the thresholds drift; the whole field if absent
    current_ma = 3.8
    layers_mm = { PMMA = 10.2 }

Objects stand in ``[[virtual.object]]`` (see `script_object`).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.errors import InputError, ScanError
from spectral.physics.cross_sections import k_edge_kev
from spectral.physics.materials import find_material
from spectral.scans.scan import Layer, Scan
from spectral.scans.script import NoCounts, read_script
from spectral.scans.script_table import Table, read_table
from spectral.scans.truth_file import ScanTruth
from spectral.virtual.detector import BadPixelShares, VirtualDetector, read_detector
from spectral.virtual.pulse_library import build_library, energy_borders
from spectral.virtual.script_object import FieldOfView, object_maps
from spectral.virtual.simulated_counts import TooManyPhotonsError
from spectral.virtual.tube import VirtualTube
from spectral.virtual.virtual_scan import simulate_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from numpy.typing import NDArray

    from spectral.scans.script import ScanScript
    from spectral.virtual.detector import VirtualSensor
    from spectral.virtual.pulse_library import PulseLibrary
    from spectral.virtual.virtual_scan import VirtualScan

_TUBE = ("drift_step", "warm_up", "warm_up_exposures", "heel", "heel_tungsten_um")
_ANGLE = "anode_angle_deg"
_KNOWN = (
    *("detector", "photons_per_mas", "seed", "detector_seed", "rows", "columns"),
    *("bad_pixels", "neighbours_together", "material", "object", "fault"),
    *(*_TUBE, _ANGLE),
)
_FAULT = (
    *("exposure", "step", "threshold_drift_kev", "row_mm", "column_mm"),
    *("current_ma", "layers_mm"),
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SimulatedScript:
    """A simulated scan, which knows what the script tells a laboratory, and the truth.

    Attributes
    ----------
    scan : Scan
    truth : ScanTruth
    detector : VirtualDetector
    """

    scan: Scan
    truth: ScanTruth
    detector: VirtualDetector


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Truth:
    """What is planted: currents in mA, thicknesses in mm, drift in keV."""

    current_ma: NDArray[np.float64] | None
    thickness_mm: NDArray[np.float64]
    threshold_drift_kev: NDArray[np.float64]


def simulate_script(
    path: Path,
    *,
    pixels: tuple[int, int] | None = None,
    threads: int = 2,
    progress: Callable[[float], None] | None = None,
) -> SimulatedScript:
    """Simulate the scan that a script describes.

    Parameters
    ----------
    path : Path
        A scan script with a `[virtual]` table.
    pixels : (rows, columns), optional
        Simulate so many instead, the object drawn smaller: for a quick look.
    threads : int
        Changes nothing but the time it takes.
    progress : callable, optional
        Called with the finished share.

    Raises
    ------
    ScanError
        If a key of the script is missing, unknown or cannot be, or what it says of
        tube, materials or detector.
    """
    try:
        return _simulated(path, pixels, threads, progress)
    except InputError as error:
        msg = f"{path}: {error}"
        raise ScanError(msg) from error


def _simulated(
    path: Path,
    pixels: tuple[int, int] | None,
    threads: int,
    progress: Callable[[float], None] | None,
) -> SimulatedScript:
    script = read_script(path)
    root = read_table(path)
    table = root.table("virtual")
    if not table.values:
        root.stop("", "the script has no [virtual] table, so nothing can be simulated")
    table.known_keys(_KNOWN)
    detector = _detector(root, table)
    template, field = _template(script, table, detector, pixels)
    seed = table.whole("seed")
    own_seed = table.whole("detector_seed", seed)
    objects = table.tables("object")
    areal, region, called = object_maps(objects, template.materials, field)
    planted = _faults(table, script, template, field)

    def tell(done: int, of: int) -> None:
        if progress is not None:
            progress(done / max(of, 1))

    together = _switch(table, "neighbours_together")
    elements = {
        element
        for layer in template.materials
        for element in find_material(
            layer.formula, density_g_cm3=layer.density_g_cm3
        ).weight_fractions
    }
    library = _library(
        detector.sensor,
        template.voltage_kv,
        tuple(sorted(elements)),
        seed=own_seed,
        keep_events=together,
    )
    try:
        made = simulate_scan(
            template,
            detector,
            _tube(table),
            seed=seed,
            detector_seed=own_seed,
            object_areal_density=areal if objects else None,
            correlated_neighbours=together,
            threshold_drift_kev=planted.threshold_drift_kev,
            true_current_ma=planted.current_ma,
            true_thickness_mm=planted.thickness_mm,
            library=library,
            threads=threads,
            progress=tell,
        )
    except TooManyPhotonsError as error:
        named = script.exposures[error.exposure].label
        table.stop("photons_per_mas", f"{named} {error.why}")
    basis = len(script.materials)
    return SimulatedScript(
        scan=replace(
            made.scan,
            materials=made.scan.materials[:basis],
            thickness_mm=made.scan.thickness_mm[:, :basis],
        ),
        truth=_truth(made, planted, areal, region, called, own_seed),
        detector=detector,
    )


@lru_cache(maxsize=2)
def _library(
    sensor: VirtualSensor,
    voltage_kv: float,
    elements: tuple[str, ...],
    *,
    seed: int,
    keep_events: bool,
) -> PulseLibrary:
    """Pulses of a sensor, kept for the next script about the same detector."""
    edges = tuple(k_edge_kev(element) for element in elements)
    borders = energy_borders(voltage_kv, edges)
    return build_library(sensor, borders, seed=seed, keep_events=keep_events)


def _detector(root: Table, table: Table) -> VirtualDetector:
    """The detector that [virtual] names, or the one that [detector] uses."""
    owner = table if "detector" in table.values else root.table("detector")
    key = "detector" if owner is table else "use"
    if key not in owner.values:
        table.stop("", "[virtual] needs detector = the file that describes it")
    path = owner.file.parent / owner.text(key)
    if not path.is_file():
        owner.stop(key, f"there is no file {path}")
    try:
        found = read_detector(path)
    except InputError as error:
        owner.stop(key, str(error))
    if _switch(table, "bad_pixels"):
        return found
    return replace(found, bad_pixels=BadPixelShares())


def _template(
    script: ScanScript,
    table: Table,
    detector: VirtualDetector,
    pixels: tuple[int, int] | None,
) -> tuple[Scan, FieldOfView]:
    """The scan without counts, with the materials that only the simulator knows."""
    said = script.pixels
    if table.owner("rows") is not None or said is None:
        said = table.whole("rows"), table.whole("columns")
    own = said if pixels is None else pixels
    pitch = detector.sensor.pitch_um
    field = FieldOfView.of(own, said, script.pixel_size_um or (pitch, pitch))
    bare = replace(script, pixels=own).template()
    extra: list[Layer] = []
    for one in table.tables("material"):
        one.known_keys(("name", "formula", "density_g_cm3"))
        name = one.text("name")
        if name in [m.name for m in (*bare.materials, *extra)]:
            one.stop("name", f"the material {name!r} is listed twice")
        extra.append(
            Layer(
                name=name,
                formula=one.text("formula", name),
                density_g_cm3=one.number("density_g_cm3"),
            )
        )
    unknown = np.asarray(np.isnan(bare.thickness_mm).any(axis=1))
    more = np.zeros((unknown.size, len(extra)))
    more[unknown] = np.nan
    template = replace(
        bare,
        counts=NoCounts((bare.shape[0], bare.shape[1], *own)),
        materials=(*bare.materials, *extra),
        thickness_mm=np.concatenate([bare.thickness_mm, more], axis=1),
    )
    if unknown.any() and not table.tables("object"):
        first = script.exposures[int(np.argmax(unknown))]
        msg = (
            f"{first.label} is an object, but nothing says what it is: add "
            "[[virtual.object]] tables, or its layers_mm"
        )
        table.stop("", msg)
    return template, field


def _tube(table: Table) -> VirtualTube:
    values: dict[str, float] = {
        "photons_per_mas": table.number("photons_per_mas"),
        **{key: table.angle(key) or 0.0 for key in _TUBE if table.owner(key)},
    }
    if table.owner(_ANGLE) is not None:
        values[_ANGLE] = table.number(_ANGLE)
    try:
        return VirtualTube(**values)
    except InputError as error:
        table.stop("", f"[virtual]: {error}")


def _faults(
    table: Table, script: ScanScript, template: Scan, field: FieldOfView
) -> _Truth:
    """What truly was, where it is not what the script's exposures say."""
    current = None if template.current_ma is None else template.current_ma.copy()
    thickness = template.thickness_mm.copy()
    drift = np.zeros((template.shape[0], field.rows, field.columns))
    names = [layer.name for layer in template.materials]
    for fault in table.tables("fault"):
        fault.known_keys(_FAULT)
        chosen = _chosen(fault, script)
        if fault.owner("threshold_drift_kev") is not None:
            offset = fault.angle("threshold_drift_kev") or 0.0
            drift[np.ix_(chosen)] += offset * field.inside(fault)
        if fault.owner("current_ma") is not None:
            if current is None:
                fault.stop("current_ma", "the script itself says no current_ma")
            current[chosen] = fault.number("current_ma", zero=True)
        said = fault.values.get("layers_mm", {})
        if not isinstance(said, dict):
            fault.stop("layers_mm", "layers_mm must be a table: { NAME = mm }")
        for name, value in said.items():
            if name not in names:
                fault.stop("layers_mm", f"layers_mm names {name!r}, which is unknown")
            mm = fault.checked_number("layers_mm", value, zero=True)
            thickness[chosen, names.index(name)] = mm
    return _Truth(current_ma=current, thickness_mm=thickness, threshold_drift_kev=drift)


def _chosen(fault: Table, script: ScanScript) -> list[int]:
    """Exposures that a fault befalls, by place in the scan."""
    if fault.owner("step") is not None:
        step = fault.text("step")
        found = [i for i, e in enumerate(script.exposures) if e.step == step]
        if not found:
            fault.stop("step", f"no exposure has step = {step!r}")
        return found
    if "exposure" not in fault.values:
        return list(range(len(script.exposures)))
    said = fault.values["exposure"]
    numbers = said if isinstance(said, list) else [said]
    place = {e.number: i for i, e in enumerate(script.exposures)}
    for number in numbers:
        if isinstance(number, bool) or number not in place:
            fault.stop("exposure", f"no exposure has number = {number!r}")
    return [place[number] for number in numbers]


def _switch(table: Table, key: str) -> bool:
    value: Any = table.values.get(key, False)
    if not isinstance(value, bool):
        table.stop(key, f"{key} must be true or false, not {value!r}")
    return value


def _truth(
    made: VirtualScan,
    planted: _Truth,
    areal: NDArray[np.float64],
    region: NDArray[np.uint16],
    called: tuple[str, ...],
    detector_seed: int,
) -> ScanTruth:
    pixels = made.pixels
    no_current = np.full(made.scan.shape[0], np.nan)
    return ScanTruth(
        material=tuple(layer.name for layer in made.scan.materials),
        areal_density=made.areal_density,
        object_areal_density=areal
        if made.object_areal_density is not None
        else np.full_like(areal, np.nan),
        region=region,
        region_name=called,
        current=no_current if planted.current_ma is None else planted.current_ma,
        output=made.output,
        threshold_drift=planted.threshold_drift_kev,
        threshold=pixels.thresholds_kev / pixels.gain,
        area=pixels.area,
        gain=pixels.gain,
        noise=pixels.noise_kev,
        kind=pixels.kind,
        seed=made.seed,
        detector_seed=detector_seed,
    )
