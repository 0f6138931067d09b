"""A whole scan from a virtual detector, and the truth behind it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.physics.cross_sections import k_edge_kev
from spectral.physics.materials import find_material
from spectral.scans.scan import CountsInMemory
from spectral.virtual.exposure import VirtualBench
from spectral.virtual.pixels import TruePixels, draw_pixels
from spectral.virtual.pulse_library import (
    build_library,
    energy_borders,
    recorded_photons,
)
from spectral.virtual.simulated_counts import SimulatedCounts
from spectral.virtual.tube import open_spectrum

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.scans.scan import CountSource, Scan
    from spectral.virtual.detector import VirtualDetector
    from spectral.virtual.pulse_library import PulseLibrary
    from spectral.virtual.tube import VirtualTube


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class VirtualScan:
    """A simulated scan and what is true of it.

    Attributes
    ----------
    scan : Scan
    pixels : TruePixels
    areal_density : array, shape (exposure, material), in g/cm2
        What truly stood in the beam; NaN where it was the object.
    object_areal_density : array, shape (material, row, column), in g/cm2, or None
    output : array, shape (exposure,)
        Relative output of the tube.
    seed : int
    """

    scan: Scan
    pixels: TruePixels
    areal_density: NDArray[np.float64]
    object_areal_density: NDArray[np.float64] | None
    output: NDArray[np.float64]
    seed: int


def simulate_scan(
    template: Scan,
    detector: VirtualDetector,
    tube: VirtualTube,
    *,
    seed: int,
    detector_seed: int | None = None,
    object_areal_density: NDArray[np.float64] | None = None,
    correlated_neighbours: bool = False,
    threshold_drift_kev: NDArray[np.float64] | None = None,
    true_current_ma: NDArray[np.float64] | None = None,
    true_thickness_mm: NDArray[np.float64] | None = None,
    library: PulseLibrary | None = None,
    on_demand: bool = False,
    threads: int = 2,
    progress: Callable[[int, int], None] | None = None,
) -> VirtualScan:
    """Simulated counts of every exposure of a scan.

    Parameters
    ----------
    template : Scan
        Says what is exposed and how; its counts are not looked at.
    detector : VirtualDetector
    tube : VirtualTube
    seed : int
        The same seed gives the same counts, whatever the number of threads.
    detector_seed : int, optional
        Of the pixels and of the sensor's pulses; the same as `seed` by default. Give it
        to expose one and the same detector with other chance, on another day.
    object_areal_density : array, shape (material, row, column), in g/cm2
        What stands in the beam in exposures whose role is "object".
    correlated_neighbours : bool
        Let neighbours count the same photons, as they do in truth. Without it each
        pixel's counts are right by themselves, but independent of its neighbours'.
    threshold_drift_kev : array, shape (exposure,) or (exposure, row, column), in keV
        Added to all thresholds in each exposure, as by polarisation.
    true_current_ma, true_thickness_mm : arrays, shape (exposure,), (exposure, material)
        What truly was, where the scan says otherwise.
    library : PulseLibrary
        Of this sensor, to spare building it again.
    on_demand : bool
        Simulate exposures when they are read, and keep none: for writing a scan larger
        than memory.
    threads : int
    progress : callable, optional
        Called with the pixels done, over all exposures being read, and their number.

    Returns
    -------
    VirtualScan
        Its scan keeps what the template says, and takes sensor and pixel size from the
        detector where the template is silent.

    Raises
    ------
    InputError
        If the template lacks currents, an object is missing, shapes disagree, or more
        photons would fall upon a pixel than can be followed.
    """
    run = _prepare(
        template, detector, tube, seed, detector_seed, object_areal_density,
        true_current_ma, true_thickness_mm, threshold_drift_kev, library, threads,
        correlated_neighbours, progress,
    )  # fmt: skip
    counts: CountSource = run
    if not on_demand:
        counts = CountsInMemory(run.read(np.arange(run.shape[0])))
    sensor = detector.sensor
    told = {
        "sensor_material": sensor.material,
        "sensor_thickness_mm": sensor.thickness_um / 1000.0,
        "pixel_size_um": (sensor.pitch_um, sensor.pitch_um),
    }
    scan = replace(
        template,
        counts=counts,
        count_limit=detector.count_limit,
        digest="",
        **{k: v for k, v in told.items() if getattr(template, k) is None},  # type: ignore[arg-type]
    )
    return VirtualScan(
        scan=scan,
        pixels=run.bench.pixels,
        areal_density=run.areal_density,
        object_areal_density=run.object_areal_density,
        output=run.output,
        seed=seed,
    )


def _prepare(
    template: Scan,
    detector: VirtualDetector,
    tube: VirtualTube,
    seed: int,
    detector_seed: int | None,
    object_areal_density: NDArray[np.float64] | None,
    true_current_ma: NDArray[np.float64] | None,
    true_thickness_mm: NDArray[np.float64] | None,
    threshold_drift_kev: NDArray[np.float64] | None,
    library: PulseLibrary | None,
    threads: int,
    correlated_neighbours: bool,
    progress: Callable[[int, int], None] | None,
) -> SimulatedCounts:
    """Check the arguments and make all that the exposures share."""
    n, _, rows, columns = template.shape
    current = template.current_ma if true_current_ma is None else true_current_ma
    if current is None:
        msg = f"{template.source}: current_ma is missing: a simulated scan needs it"
        raise InputError(msg)
    materials = [
        find_material(layer.formula, density_g_cm3=layer.density_g_cm3)
        for layer in template.materials
    ]
    areal = template.areal_density
    if true_thickness_mm is not None:
        density = np.array([m.density_g_cm3 for m in materials])
        areal = np.asarray(true_thickness_mm) * 0.1 * density
    _check_shapes(template, current, areal, object_areal_density)
    own_seed = seed if detector_seed is None else detector_seed
    if library is None:
        elements = {e for m in materials for e in m.weight_fractions}
        edges = tuple(k_edge_kev(e) for e in sorted(elements))
        library = build_library(
            detector.sensor,
            energy_borders(template.voltage_kv, edges),
            seed=own_seed,
            keep_events=correlated_neighbours,
            threads=threads,
        )
    rng = np.random.default_rng(own_seed)
    pixels = draw_pixels(detector, template.thresholds_kev, (rows, columns), rng)
    if own_seed != seed:
        rng = np.random.default_rng(seed)
    tungsten = find_material("W").mass_attenuation(library.energy_kev)
    bench = VirtualBench(
        detector=detector,
        pixels=pixels,
        library=library,
        spectrum=open_spectrum(template, tube, library.borders_kev),
        attenuation=np.array(
            [*(m.mass_attenuation(library.energy_kev) for m in materials), tungsten]
        ),
        seed=seed,
        threads=threads,
        recorded=recorded_photons(library) if correlated_neighbours else None,
    )
    counts = SimulatedCounts(
        bench=bench,
        template=template,
        tube=tube,
        current_ma=np.asarray(current, dtype=np.float64),
        areal_density=areal,
        object_areal_density=object_areal_density,
        threshold_drift_kev=_offsets(threshold_drift_kev, template),
        output=tube.output(n, rng),
        progress=progress,
    )
    counts.refuse_too_many()
    return counts


def _check_shapes(
    template: Scan,
    current_ma: NDArray[np.float64],
    areal_density: NDArray[np.float64],
    object_areal_density: NDArray[np.float64] | None,
) -> None:
    """Refuse arrays that do not fit the template."""
    n, _, rows, columns = template.shape
    materials = len(template.materials)
    wanted: dict[str, tuple[tuple[int, ...], tuple[int, ...]]] = {
        "true_current_ma": (np.shape(current_ma), (n,)),
        "true_thickness_mm": (np.shape(areal_density), (n, materials)),
    }
    if object_areal_density is not None:
        wanted["object_areal_density"] = (
            np.shape(object_areal_density),
            (materials, rows, columns),
        )
    for name, (came, want) in wanted.items():
        if came != want:
            msg = f"{name} has shape {came}, the template needs {want}"
            raise InputError(msg)
    for i, role in enumerate(template.role):
        known = bool(np.all(np.isfinite(areal_density[i])))
        if not known and (role != "object" or object_areal_density is None):
            msg = (
                f"exposure {i} ({role}): nothing says what stood in the beam: give "
                "object_areal_density or its thickness_mm"
            )
            raise InputError(msg)


def _offsets(
    threshold_drift_kev: NDArray[np.float64] | None, template: Scan
) -> NDArray[np.float64]:
    """Threshold offset, shape (exposure, 1 or row, 1 or column), in keV."""
    n, _, rows, columns = template.shape
    if threshold_drift_kev is None:
        return np.zeros((n, 1, 1))
    drift = np.asarray(threshold_drift_kev, dtype=np.float64)
    if drift.shape not in ((n,), (n, rows, columns)):
        msg = (
            f"threshold_drift_kev has shape {drift.shape}, the template needs {(n,)} "
            f"or {(n, rows, columns)}"
        )
        raise InputError(msg)
    return drift.reshape(n, *(drift.shape[1:] or (1, 1)))
