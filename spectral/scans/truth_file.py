"""What is true of a simulated scan, as one HDF5 file beside it."""

from __future__ import annotations

from dataclasses import dataclass, fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

from spectral.errors import FileFormatError
from spectral.scans.nexus import Node, new_group, opened, put, written_whole

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

FORMAT = "wedgewright truth 1"
_UNITS = {
    "areal_density": "g/cm2",
    "object_areal_density": "g/cm2",
    "current": "mA",
    "threshold_drift": "keV",
    "threshold": "keV",
    "noise": "keV",
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ScanTruth:
    """Everything that a simulated scan's counts were made from.

    n exposures, K thresholds, m materials, (y, x) pixels.

    Attributes
    ----------
    material : tuple of str, length m
        The scan's own first, then those that only the simulator knows.
    areal_density : array, shape (n, m), in g/cm2
        What truly stood in the beam; NaN where it was the object.
    object_areal_density : array, shape (m, y, x), in g/cm2
        NaN throughout if there was none.
    region : array of uint16, shape (y, x)
        Index into `region_name`.
    region_name : tuple of str
        "background" and the names of the object's parts.
    current : array, shape (n,), in mA
    output : array, shape (n,)
        Relative output of the tube.
    threshold_drift : array, shape (n, y, x), in keV
        Added to the thresholds in each exposure.
    threshold : array, shape (K, y, x), in keV
        On the photon's energy scale (gain taken in), without the drift.
    area, gain : arrays, shape (y, x)
        Relative.
    noise : array, shape (y, x), in keV
    kind : array of uint8, shape (y, x)
        0 = good, else how the pixel misbehaves.
    seed, detector_seed : int
    """

    material: tuple[str, ...]
    areal_density: NDArray[np.float64]
    object_areal_density: NDArray[np.float64]
    region: NDArray[np.uint16]
    region_name: tuple[str, ...]
    current: NDArray[np.float64]
    output: NDArray[np.float64]
    threshold_drift: NDArray[np.float64]
    threshold: NDArray[np.float64]
    area: NDArray[np.float64]
    gain: NDArray[np.float64]
    noise: NDArray[np.float64]
    kind: NDArray[np.uint8]
    seed: int
    detector_seed: int


def write_truth(truth: ScanTruth, path: str | Path) -> None:
    """Write the truth, under its name only when it is complete."""
    with written_whole(Path(path)) as file:
        file.attrs["format"] = FORMAT
        entry = new_group(file, "entry", "NXentry")
        put(entry, "title", "what a simulated scan was made from")
        for field in fields(truth):
            value = getattr(truth, field.name)
            put(entry, field.name, value, units=_UNITS.get(field.name, ""))


def read_truth(path: str | Path) -> ScanTruth:
    """Truth of a file.

    Raises
    ------
    FileFormatError
        If the file is of another kind, or a field is missing.
    """
    with opened(Path(path)) as file:
        found = file.attrs.get("format", "")
        if found != FORMAT:
            msg = f"{path}: this is no truth file ({FORMAT!r} is not its format)"
            raise FileFormatError(msg)
        entry = Node(str(path), file["entry"])
        values: dict[str, Any] = {}
        for field in fields(ScanTruth):
            name = field.name
            if name in ("material", "region_name"):
                values[name] = entry.texts(name)
            elif name in ("seed", "detector_seed"):
                values[name] = int(entry.values(name))
            else:
                values[name] = entry.values(name)
    return ScanTruth(**values)
