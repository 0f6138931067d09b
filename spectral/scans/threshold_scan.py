"""A threshold scan as data: counts against the setting of a threshold."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError, ScanError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.scans.scan import Filter

SOURCE_KINDS = ("fluorescence target", "radionuclide", "edge filter", "tube end")
"""K lines of an element; gamma line; K edge of a filter in a tube's beam; the highest
energy of a tube's beam."""
LEAST_SETTINGS = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class LineSource:
    """What sent the photons, and so which known energy the scan holds.

    Attributes
    ----------
    kind : str
        One of `SOURCE_KINDS`.
    emitter : str
        Symbol of the target's or the filter's element, or name of the nuclide
        ("Am-241"); "" for a tube's end.
    voltage_kv : float or None, in kV
        Of the tube; needed for an edge filter and a tube's end.
    filters : tuple of Filter
        What the tube's beam passes, the edge filter among them.
    """

    kind: str
    emitter: str = ""
    voltage_kv: float | None = None
    filters: tuple[Filter, ...] = ()

    def __post_init__(self) -> None:
        """Refuse a kind that no one knows and a tube without its voltage."""
        if self.kind not in SOURCE_KINDS:
            msg = (
                f"source kind {self.kind!r} is unknown: use one of "
                f"{', '.join(SOURCE_KINDS)}"
            )
            raise InputError(msg)
        if (self.kind == "tube end") == bool(self.emitter):
            wanted = "no emitter" if self.emitter else "an emitter such as 'Sn'"
            msg = f"a source of kind {self.kind!r} takes {wanted}"
            raise InputError(msg)
        if self.kind in {"edge filter", "tube end"} and not self.voltage_kv:
            msg = f"a source of kind {self.kind!r} needs the tube's voltage_kv"
            raise InputError(msg)

    @property
    def title(self) -> str:
        """The source in a few words."""
        if self.kind == "tube end":
            return f"tube end at {self.voltage_kv:g} kV"
        return f"{self.emitter} {self.kind}"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ThresholdScan:
    """Counts above a threshold at each of its settings; n settings, C comparators.

    Attributes
    ----------
    settings : array, shape (n,), in units of the detector's converter
    counts : array of integers, shape (n, C, y, x)
        Pulses above the setting, for each comparator of a pixel that was scanned.
    count_time_s : array, shape (n,), in s
    source : LineSource
    pixel_mask : array of uint32, shape (y, x)
        0 = good; the bits are NXdetector's.
    sensor_material, sensor_thickness_mm, pixel_size_um :
        None where the scan does not say; pixel size is (y, x).
    nominal_scale : tuple of two floats, or None
        Rough keV at setting 0 and keV per unit of setting.
    file, digest, title, start_time : str
    """

    settings: NDArray[np.float64]
    counts: NDArray[np.uint32]
    count_time_s: NDArray[np.float64]
    source: LineSource
    pixel_mask: NDArray[np.uint32]
    sensor_material: str | None = None
    sensor_thickness_mm: float | None = None
    pixel_size_um: tuple[float, float] | None = None
    nominal_scale: tuple[float, float] | None = None
    file: str = "threshold scan in memory"
    digest: str = ""
    title: str = ""
    start_time: str = ""

    def __post_init__(self) -> None:
        """Check that the lengths agree and that the settings are usable."""
        n, _, y, x = self.counts.shape
        wanted = {
            "settings": (self.settings.shape, (n,)),
            "count_time_s": (self.count_time_s.shape, (n,)),
            "pixel_mask": (self.pixel_mask.shape, (y, x)),
        }
        for name, (came, want) in wanted.items():
            if came != want:
                msg = f"{self.file}: {name} has shape {came}, the counts need {want}"
                raise InputError(msg)
        step = np.diff(self.settings)
        if n < LEAST_SETTINGS or not (np.all(step > 0.0) or np.all(step < 0.0)):
            msg = (
                f"{self.file}: settings must rise or fall steadily and be "
                f"{LEAST_SETTINGS} at least, got {self.settings.tolist()}"
            )
            raise ScanError(msg)
        if not np.all(np.isfinite(self.count_time_s) & (self.count_time_s > 0.0)):
            msg = f"{self.file}: count_time_s must be more than zero everywhere"
            raise ScanError(msg)

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(setting, comparator, row, column)."""
        n, c, y, x = self.counts.shape
        return n, c, y, x
