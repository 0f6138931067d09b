"""An invented part on an invented detector: a polymer connector housing.

Everything here is made up for the demonstration: no product, laboratory or
measurement stands behind any number.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan
from spectral.virtual.detector import (
    BadPixelShares,
    PixelSpread,
    VirtualDetector,
    VirtualSensor,
)
from spectral.virtual.tube import VirtualTube
from spectral.virtual.virtual_scan import simulate_scan

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

ROWS, COLUMNS = 32, 44
REPEATS = 5
THRESHOLDS_KEV = (20.0, 32.0, 44.0, 56.0, 68.0)
POLYMER = Layer(name="nylon", formula="C6H11NO", density_g_cm3=1.14)
ALUMINIUM = Layer(name="Al", formula="Al", density_g_cm3=2.70)
STEEL = Layer(name="steel", formula="Fe", density_g_cm3=7.87)
REGIONS = ("air", "housing wall", "housing floor", "aluminium insert", "ramp", "pins")
PIN_MM = 1.0
PROFILE_ROW = 11
"""A row through walls, floor, insert and ramp."""
WEDGE_TITLE = "demonstration wedge scan (invented)"
STACKS_MM = (
    (5.0, 0.0), (15.0, 0.0), (30.0, 0.0), (50.0, 0.0),
    (0.0, 0.5), (0.0, 2.0), (0.0, 5.0), (0.0, 9.0),
    (5.0, 0.5), (15.0, 2.0), (30.0, 5.0), (50.0, 9.0),
    (5.0, 5.0), (15.0, 9.0), (30.0, 0.5), (50.0, 2.0),
    (5.0, 9.0), (15.0, 0.5), (30.0, 2.0), (50.0, 5.0),
)  # fmt: skip
"""Nylon and aluminium of each wedge step, in mm; measured in a mixed order."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scenario:
    """Both scans of the demonstration, and what is true of them.

    Attributes
    ----------
    wedge, part : Scan
    areal_density : array, shape (material, row, column), in g/cm2
        True nylon and aluminium of the part.
    region : array of int64, shape (row, column)
        Index into `REGIONS`.
    threshold_kev : array, shape (threshold, row, column), in keV
        True thresholds on the photon's energy scale.
    bad : array of bool, shape (row, column)
        Truly bad pixels.
    """

    wedge: Scan
    part: Scan
    areal_density: NDArray[np.float64]
    region: NDArray[np.int64]
    threshold_kev: NDArray[np.float64]
    bad: NDArray[np.bool_]


def detector() -> VirtualDetector:
    """The invented detector: 1 mm CdTe, 120 um pixels, five thresholds."""
    return VirtualDetector(
        name="demonstration detector, invented",
        sensor=VirtualSensor(
            material="CdTe",
            density_g_cm3=5.85,
            thickness_um=1000.0,
            pitch_um=120.0,
            bias_v=500.0,
            pair_energy_ev=4.43,
            fano=0.1,
            relative_permittivity=10.9,
        ),
        thresholds_kev=THRESHOLDS_KEV,
        noise_kev=1.8,
        dead_time_ns=120.0,
        pulse_shape="semi-gaussian",
        counter_bits=20,
        spread=PixelSpread(
            threshold_kev=0.7,
            threshold_common_kev=0.3,
            gain=0.01,
            noise=0.08,
            area=0.02,
            dead_time=0.05,
        ),
        bad_pixels=BadPixelShares(dead=0.003, stuck=0.002, noisy=0.003, unstable=0.002),
    )


def part_mm() -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Nylon, aluminium and steel of the part in mm, and its regions."""
    layers = np.zeros((3, ROWS, COLUMNS))
    region = np.zeros((ROWS, COLUMNS), np.int64)
    body = (slice(3, 29), slice(3, 33))
    floor = (slice(6, 26), slice(6, 30))
    insert = (slice(8, 16), slice(8, 28))
    ramp = (slice(3, 29), slice(35, 43))
    layers[0][body], region[body] = 24.0, 1
    layers[0][floor], region[floor] = 8.0, 2
    layers[1][insert], region[insert] = 4.0, 3
    layers[0][ramp] = np.linspace(2.0, 45.0, 26)[:, None]
    region[ramp] = 4
    for column in (9, 14, 19, 24):
        pin = (slice(18, 25), slice(column, column + 2))
        layers[2][pin], region[pin] = PIN_MM, 5
    return layers, region


def _template() -> Scan:
    """Both sessions as one list of exposures, with steel as a third material."""
    order = np.random.default_rng(4).permutation(len(STACKS_MM))
    steps = np.array(STACKS_MM)[order]
    role: list[str] = []
    thickness: list[tuple[float, float, float]] = []
    current: list[float] = []
    time: list[float] = []

    def add(what: str, stack: tuple[float, float], ma: float, s: float = 0.1) -> None:
        role.append(what)
        thickness.append((*stack, 0.0 if what != "object" else np.nan))
        current.append(ma)
        time.append(s)

    nothing = (0.0, 0.0)
    for _ in range(2):
        add("dark", nothing, 0.0)
    for ma, s in ((4.0, 0.1), (4.0, 0.1), (2.0, 0.1), (0.8, 0.2)):
        add("open", nothing, ma, s)
    for i, stack in enumerate(steps):
        if i == len(steps) // 2:
            add("open", nothing, 4.0)
        add("wedge", (float(stack[0]), float(stack[1])), 4.0)
    for ma, s in ((4.0, 0.1), (2.0, 0.1), (0.8, 0.2)):
        add("open", nothing, ma, s)
    add("dark", nothing, 0.0)
    add("open", nothing, 4.0)
    for _ in range(REPEATS):
        add("object", (np.nan, np.nan), 4.0)
    add("open", nothing, 4.0)
    return Scan(
        counts=CountsInMemory(
            np.zeros((len(role), len(THRESHOLDS_KEV), ROWS, COLUMNS), np.uint32)
        ),
        thresholds_kev=np.array(THRESHOLDS_KEV),
        role=tuple(role),
        thickness_mm=np.array(thickness),
        materials=(POLYMER, ALUMINIUM, STEEL),
        count_time_s=np.array(time),
        voltage_kv=90.0,
        pixel_mask=np.zeros((ROWS, COLUMNS), np.uint32),
        current_ma=np.array(current),
        filters=(Filter(material="Al", thickness_mm=2.0),),
        sensor_material="CdTe",
        sensor_thickness_mm=1.0,
        pixel_size_um=(120.0, 120.0),
        source="demonstration scenario",
        start_time="2026-01-01T08:00:00+00:00",
    )


def build_scenario(
    *, seed: int = 7, progress: Callable[[float], None] | None = None
) -> Scenario:
    """Simulate both scans of the demonstration, event by event.

    Parameters
    ----------
    seed : int
    progress : callable, optional
        Called with the finished share.
    """
    template = _template()
    layers, region = part_mm()
    density = np.array([m.density_g_cm3 for m in template.materials])
    areal = 0.1 * layers * density[:, None, None]

    def tell(done: int, of: int) -> None:
        if progress is not None:
            progress(done / max(of, 1))

    made = simulate_scan(
        template,
        detector(),
        VirtualTube(photons_per_mas=13000.0, drift_step=5e-4, heel=0.02),
        seed=seed,
        object_areal_density=areal,
        progress=tell,
    )
    last_wedge = template.role.index("object") - 2
    everything = np.arange(len(template.role))
    pixels = made.pixels
    return Scenario(
        wedge=_session(made.scan, everything[everything < last_wedge], WEDGE_TITLE),
        part=_session(
            made.scan,
            everything[everything >= last_wedge],
            "demonstration part (invented)",
        ),
        areal_density=areal[:2],
        region=region,
        threshold_kev=pixels.thresholds_kev / pixels.gain,
        bad=pixels.kind != 0,
    )


def _session(scan: Scan, exposures: NDArray[np.int64], title: str) -> Scan:
    """Some exposures as a scan of their own that knows nylon and aluminium only."""
    current = scan.current_ma
    return replace(
        scan,
        counts=CountsInMemory(scan.counts.read(exposures)),
        role=tuple(scan.role[int(i)] for i in exposures),
        thickness_mm=scan.thickness_mm[exposures, :2],
        materials=scan.materials[:2],
        count_time_s=scan.count_time_s[exposures],
        current_ma=None if current is None else current[exposures],
        title=title,
    )
