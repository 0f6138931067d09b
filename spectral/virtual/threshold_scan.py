"""A threshold scan of a virtual detector, event by event, and the truth behind it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.physics.cross_sections import k_edge_kev, k_lines
from spectral.physics.materials import find_material
from spectral.physics.tube import tube_spectrum
from spectral.scans.threshold_scan import LineSource, ThresholdScan
from spectral.virtual.exposure import Beam, VirtualBench
from spectral.virtual.pixels import TruePixels, draw_pixels
from spectral.virtual.pulse_library import build_library, energy_borders

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.virtual.detector import VirtualDetector

AMERICIUM_LINES = (
    (13.9, 0.12),
    (17.8, 0.18),
    (20.8, 0.05),
    (26.3446, 0.023),
    (59.5409, 0.359),
)
"""keV and photons per decay of Am-241 with its daughter's L lines.

Source: half-remembered decay tables (from memory); the L groups are rounded.
"""
LINE_WIDTH_KEV = 0.002
LIBRARY_PHOTONS = 60_000


@dataclass(frozen=True, slots=True, kw_only=True)
class SettingSpread:
    """How settings become keV, and how that differs between pixels.

    Attributes
    ----------
    offset_kev, gain_kev : float
        Of the average pixel: keV at setting 0, and keV per unit of setting.
    offset_spread_kev : float, in keV
        Standard deviation between pixels.
    gain_spread : float
        Standard deviation between pixels, as a share of the gain.
    """

    offset_kev: float
    gain_kev: float
    offset_spread_kev: float = 0.0
    gain_spread: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class VirtualThresholdScans:
    """Simulated threshold scans of one detector and what is true of it.

    Attributes
    ----------
    scans : tuple of ThresholdScan
    pixels : TruePixels
        Their thresholds mean nothing here: they change with the setting.
    offset_kev, gain_kev : arrays, shape (row, column)
        True keV at setting 0, and keV per unit of setting.
    """

    scans: tuple[ThresholdScan, ...]
    pixels: TruePixels
    offset_kev: NDArray[np.float64]
    gain_kev: NDArray[np.float64]

    def energies_kev(self, setting: float) -> NDArray[np.float64]:
        """True threshold of each pixel at a setting, shape (row, column)."""
        return np.asarray(self.offset_kev + self.gain_kev * setting)


def simulate_threshold_scans(
    sources: tuple[LineSource, ...],
    settings: tuple[NDArray[np.float64], ...],
    detector: VirtualDetector,
    scale: SettingSpread,
    shape: tuple[int, int],
    *,
    seed: int,
    photons: float | tuple[float, ...] = 4000.0,
    photons_per_s: float = 3.0e4,
    background: float = 0.0,
    nominal: bool = False,
    threads: int = 2,
    progress: Callable[[float], None] | None = None,
) -> VirtualThresholdScans:
    """Threshold scans, one for each source.

    Parameters
    ----------
    sources : tuple of LineSource
    settings : tuple of arrays, shape (setting,)
        For each source.
    detector : VirtualDetector
        Its threshold and gain spread are not used: `scale` says how pixels differ.
    scale : SettingSpread
    shape : (row, column)
    seed : int
    photons : float or tuple of float
        Upon each pixel at each setting, for each source if there are several.
    photons_per_s : float, in 1/s
        Upon each pixel; low enough for little pile-up.
    background : float
        Scattered tube photons per line photon of a fluorescence target: a spectrum of
        80 kV behind 2 mm Al.
    nominal : bool
        Write the average scale into the scans.
    threads : int
    progress : callable, optional
        Called with the finished share.

    Raises
    ------
    InputError
        If sources and settings differ in number, or a threshold falls below 1 keV.
    """
    if len(sources) != len(settings):
        msg = f"{len(sources)} sources need as many settings, got {len(settings)}"
        raise InputError(msg)
    many = photons if isinstance(photons, tuple) else (photons,) * len(sources)
    rng = np.random.default_rng(seed)
    offset = scale.offset_kev + scale.offset_spread_kev * rng.standard_normal(shape)
    gain = scale.gain_kev * (1.0 + scale.gain_spread * rng.standard_normal(shape))
    spread = replace(
        detector.spread, threshold_kev=0.0, threshold_common_kev=0.0, gain=0.0
    )
    pixels = draw_pixels(replace(detector, spread=spread), np.array([20.0]), shape, rng)
    scans = []
    for j, (source, setting) in enumerate(zip(sources, settings, strict=True)):
        counts = _expose(
            source,
            [offset + gain * s for s in setting],
            replace(detector, spread=spread),
            pixels,
            seed=seed + 1000 * (j + 1),
            duration_s=many[j] / photons_per_s,
            photons_per_s=photons_per_s,
            background=background,
            threads=threads,
        )
        scans.append(
            ThresholdScan(
                settings=np.asarray(setting, dtype=np.float64),
                counts=counts,
                count_time_s=np.full(len(setting), many[j] / photons_per_s),
                source=source,
                pixel_mask=np.zeros(shape, np.uint32),
                sensor_material=detector.sensor.material,
                sensor_thickness_mm=1e-3 * detector.sensor.thickness_um,
                pixel_size_um=(detector.sensor.pitch_um, detector.sensor.pitch_um),
                nominal_scale=((scale.offset_kev, scale.gain_kev) if nominal else None),
                title=f"virtual scan, {source.title}",
            )
        )
        if progress is not None:
            progress((j + 1) / len(sources))
    return VirtualThresholdScans(
        scans=tuple(scans), pixels=pixels, offset_kev=offset, gain_kev=gain
    )


def _expose(
    source: LineSource,
    levels_kev: list[NDArray[np.float64]],
    detector: VirtualDetector,
    pixels: TruePixels,
    *,
    seed: int,
    duration_s: float,
    photons_per_s: float,
    background: float,
    threads: int,
) -> NDArray[np.uint32]:
    """Counts of one scan, shape (setting, 1, row, column)."""
    lowest = min(float(level.min()) for level in levels_kev)
    if lowest < 1.0:
        msg = f"a threshold falls to {lowest:.2f} keV: scan settings of 1 keV and more"
        raise InputError(msg)
    borders, spectrum = _photons(source, background)
    shape = pixels.kind.shape
    bench = VirtualBench(
        detector=detector,
        pixels=pixels,
        library=build_library(
            detector.sensor,
            borders,
            seed=seed,
            photons_per_bin=LIBRARY_PHOTONS,
            threads=threads,
        ),
        spectrum=spectrum,
        attenuation=np.zeros((1, spectrum.size)),
        seed=seed,
        threads=threads,
    )
    beam = Beam(
        duration_s=duration_s,
        photons_per_s=np.full(shape, photons_per_s),
        areal_density=np.zeros((1, *shape)),
    )
    counts = [
        replace(bench, pixels=replace(pixels, thresholds_kev=level[None])).expose(
            number, beam
        )
        for number, level in enumerate(levels_kev)
    ]
    return np.stack(counts)


def _photons(
    source: LineSource, background: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Energy borders in keV, and the share of photons in each bin."""
    if source.kind in {"edge filter", "tube end"}:
        return _tube_photons(float(source.voltage_kv or 0.0), source)
    lines: tuple[tuple[float, float], ...] = AMERICIUM_LINES
    if source.kind == "fluorescence target":
        lines = k_lines(source.emitter)
    half = 0.5 * LINE_WIDTH_KEV
    borders = np.unique([e + side for e, _ in lines for side in (-half, half)])
    extra, below = np.empty(0), np.empty(0)
    if background > 0.0:
        extra, below = _tube_photons(80.0, None)
        borders = np.unique(np.concatenate([borders, extra]))
    shares = np.zeros(borders.size - 1)
    total = sum(share for _, share in lines)
    for energy, share in lines:
        shares[np.searchsorted(borders, energy) - 1] += share / total
    if background > 0.0:
        middle = 0.5 * (borders[1:] + borders[:-1])
        cell = np.clip(np.searchsorted(extra, middle) - 1, 0, below.size - 1)
        density = below[cell] / np.diff(extra)[cell]
        density[(middle < extra[0]) | (middle > extra[-1])] = 0.0
        shares += background * density * np.diff(borders)
    return borders, shares / shares.sum()


def _tube_photons(
    voltage_kv: float, source: LineSource | None
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Borders and shares of a tube's photons behind its filters, or 2 mm Al."""
    filters = [("Al", 2.0)]
    if source is not None:
        filters = [(f.material, f.thickness_mm) for f in source.filters]
    found = [(find_material(name), mm) for name, mm in filters]
    elements = sorted({e for m, _ in found for e in m.weight_fractions} | {"W"})
    borders = energy_borders(voltage_kv, tuple(k_edge_kev(e) for e in elements))
    middle = 0.5 * (borders[1:] + borders[:-1])
    photons = tube_spectrum(voltage_kv, borders)
    for material, thickness in found:
        path = material.areal_density(thickness)
        photons = photons * np.exp(-path * material.mass_attenuation(middle))
    return borders, photons / photons.sum()
