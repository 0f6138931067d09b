"""A scan as data: what was counted, and what stood in the beam."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Protocol

import numpy as np

from spectral.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

ROLES = ("dark", "open", "wedge", "object")
MOST_G_CM3 = 25.0
"""More than any substance has: osmium, the densest, has 22.6 g/cm3 (from memory)."""
MOST_G_CM2 = 300.0
"""Nothing counts behind more: up to 160 keV every element attenuates by 0.1 cm2/g or
more, which leaves exp(-30) of the beam. Source: J. H. Hubbell, S. M. Seltzer, NIST
Standard Reference Database 126 (2004), table 3."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Layer:
    """A material of the scan: a filter of the beam, or what a wedge is made of.

    Attributes
    ----------
    name : str
        What people call it ("PMMA").
    formula : str
        Chemical formula, or a name the material table knows.
    density_g_cm3 : float
        In g/cm3; the scan's own value is always honoured.
    """

    name: str
    formula: str
    density_g_cm3: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Filter:
    """Fixed beam filtration: material (element symbol, formula or name) and mm."""

    material: str
    thickness_mm: float


class CountSource(Protocol):
    """Where a scan's counts come from: memory, one file, or many images."""

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(exposure, threshold, row, column)."""

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Counts above each threshold of the named exposures, as they were stored."""


@dataclass(frozen=True, slots=True, eq=False)
class CountsInMemory:
    """Counts held in an array of shape (exposure, threshold, row, column)."""

    array: NDArray[np.uint32]

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(exposure, threshold, row, column)."""
        n, k, y, x = self.array.shape
        return n, k, y, x

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Counts of the named exposures, shape (exposure, threshold, row, column)."""
        return self.array[np.asarray(exposures, dtype=np.int64)]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scan:
    """One scan: counts above thresholds, and everything said about the exposures.

    n exposures, K thresholds, m materials, (y, x) pixels.

    Attributes
    ----------
    counts : CountSource
        Counts above each threshold, shape (n, K, y, x).
    thresholds_kev : array, shape (K,), in keV
        Nominal settings, rising.
    role : tuple of str, length n
        Each one of `ROLES`.
    thickness_mm : array, shape (n, m), in mm
        What stood in the beam; 0 for nothing, NaN for an unknown object.
    materials : tuple of Layer, length m
    count_time_s : array, shape (n,), in s
    current_ma : array, shape (n,), in mA, or None if the scan does not say
    voltage_kv : float
    target_material : str
    filters : tuple of Filter
    sensor_material, sensor_thickness_mm, pixel_size_um :
        None where the scan does not say; pixel size is (y, x).
    pixel_mask : array of uint32, shape (y, x)
        0 = good; the bits are NXdetector's.
    rotation_angle_deg : array, shape (n,), or None
    count_limit : int
        Largest value the stored integer can hold, or the counter's own stop.
    source : str
        The file it came from, for messages.
    digest : str
        SHA-256 of the content, "" if it was never stored.
    title, start_time : str
    """

    counts: CountSource
    thresholds_kev: NDArray[np.float64]
    role: tuple[str, ...]
    thickness_mm: NDArray[np.float64]
    materials: tuple[Layer, ...]
    count_time_s: NDArray[np.float64]
    voltage_kv: float
    pixel_mask: NDArray[np.uint32]
    current_ma: NDArray[np.float64] | None = None
    target_material: str = "W"
    filters: tuple[Filter, ...] = ()
    sensor_material: str | None = None
    sensor_thickness_mm: float | None = None
    pixel_size_um: tuple[float, float] | None = None
    rotation_angle_deg: NDArray[np.float64] | None = None
    count_limit: int = 2**32 - 1
    source: str = "scan in memory"
    digest: str = ""
    title: str = ""
    start_time: str = ""
    notes: tuple[str, ...] = field(default=())

    def __post_init__(self) -> None:
        """Check that the lengths agree."""
        n, k, y, x = self.counts.shape
        wanted = {
            "thresholds_kev": (self.thresholds_kev.shape, (k,)),
            "role": ((len(self.role),), (n,)),
            "thickness_mm": (self.thickness_mm.shape, (n, len(self.materials))),
            "count_time_s": (self.count_time_s.shape, (n,)),
            "pixel_mask": (self.pixel_mask.shape, (y, x)),
        }
        if self.current_ma is not None:
            wanted["current_ma"] = (self.current_ma.shape, (n,))
        for name, (came, want) in wanted.items():
            if came != want:
                msg = f"{self.source}: {name} has shape {came}, the counts need {want}"
                raise InputError(msg)

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(exposure, threshold, row, column)."""
        return self.counts.shape

    @property
    def areal_density(self) -> NDArray[np.float64]:
        """What stood in the beam, shape (exposure, material), in g/cm2."""
        density = np.array([layer.density_g_cm3 for layer in self.materials])
        areal: NDArray[np.float64] = self.thickness_mm * 0.1 * density
        return areal

    def exposures(self, *roles: str) -> NDArray[np.int64]:
        """Indices of the exposures that have one of the roles, in order."""
        return np.array([i for i, r in enumerate(self.role) if r in roles], np.int64)

    def with_counts(self, array: NDArray[np.uint32]) -> Scan:
        """Return the same scan with other counts (n, K, y, x), held in memory."""
        return replace(self, counts=CountsInMemory(array), digest="")
