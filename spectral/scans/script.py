"""The scan script: a TOML text that lists a scan's exposures in order.

The fixed facts stand once, then each exposure with its role, layers and images::

    title = "step wedge, Monday"

    [source]
    voltage_kv = 90
    target_material = "W"
    filters = [{ material = "Al", thickness_mm = 1.5 }]

    [detector]
    thresholds_kev = [20, 35, 50]
    sensor_material = "CdTe"
    sensor_thickness_mm = 1.0
    pixel_size_um = [110, 110]      # row pitch, column pitch
    rows = 256                      # needed only while there are no images
    columns = 256

    [[material]]
    name = "PMMA"
    formula = "C5H8O2"
    density_g_cm3 = 1.19

    [defaults]                      # for every exposure that does not say otherwise
    count_time_s = 0.25             # of one frame
    frames = 4                      # frames that are added up
    current_ma = 4.0
    files = "images/{exposure:03d}_{threshold}.tif"

    [[exposure]]
    role = "dark"

    [[exposure]]
    step = "PMMA 8"
    role = "wedge"
    layers_mm = { PMMA = 8.0 }
    repeats = 2

A pattern may hold {exposure}, {threshold}, {threshold_kev}, {frame}, {step} and
{repeat}, with a format as in {exposure:03d}; these numbers begin at 1 ({exposure} is
the exposure's `number`, if it has one), while messages and commands count exposures
from 0. What the pattern
does not tell apart are the pages of one file, in the order that `pages` gives
(by default exposure, threshold, frame, the last running fastest). With `dataset`, a
pattern too, the files are HDF5. `[detector]`, `[source]` and a `[[material]]` may say
``use = "other.toml"`` to take the table, or the list, of that name from another file;
for the detector that may also be a description for the simulator (``[sensor]``,
``[electronics]``). Paths are those from the script's own folder.
Everything under `[virtual]` is left to the simulator.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.errors import FileFormatError, InputError, ScanError
from spectral.scans.image_files import ImageFile, image_layout, read_pages
from spectral.scans.scan import MOST_G_CM3, Filter, Layer, Scan
from spectral.scans.scan_file import file_digest, read_scan
from spectral.scans.script_exposures import read_exposures
from spectral.scans.script_images import images_of
from spectral.scans.script_table import Table, read_table

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from numpy.typing import NDArray

    from spectral.scans.script_exposures import ScriptExposure

_TOP = (
    "title",
    "start_time",
    "source",
    "detector",
    "material",
    "defaults",
    "exposure",
    "virtual",
)
_SOURCE = ("use", "voltage_kv", "target_material", "filters")
_DETECTOR = (
    "use",
    "thresholds_kev",
    "sensor_material",
    "sensor_thickness_mm",
    "pixel_size_um",
    "rows",
    "columns",
    "pixel_mask",
    "pixel_mask_dataset",
)
_MATERIAL = ("name", "formula", "density_g_cm3", "plates_mm")


@dataclass(frozen=True, slots=True)
class NoCounts:
    """Zero counts everywhere, held nowhere: for a scan that is yet to be made."""

    shape: tuple[int, int, int, int]

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Zeros, shape (exposure, threshold, row, column)."""
        return np.zeros((len(exposures), *self.shape[1:]), np.uint32)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ScanScript:
    """A scan script as data.

    Attributes
    ----------
    path : Path
    exposures : tuple of ScriptExposure
        Repeats written out, in order.
    materials : tuple of Layer
    thresholds_kev : array, shape (K,), in keV
    pixels : (rows, columns), or None if only the images tell
    mask_file : ImageFile or None
    virtual : mapping
        What the script says to the simulator, as it stands there.
    """

    path: Path
    exposures: tuple[ScriptExposure, ...]
    materials: tuple[Layer, ...]
    thresholds_kev: NDArray[np.float64]
    voltage_kv: float
    target_material: str
    filters: tuple[Filter, ...]
    sensor_material: str | None
    sensor_thickness_mm: float | None
    pixel_size_um: tuple[float, float] | None
    pixels: tuple[int, int] | None
    mask_file: ImageFile | None
    title: str = ""
    start_time: str = ""
    virtual: Mapping[str, Any] = field(default_factory=dict)

    def template(self) -> Scan:
        """The scan with zero counts: what a simulator or a planner starts from.

        Raises
        ------
        ScanError
            If the script does not say how many rows and columns there are.
        """
        if self.pixels is None:
            msg = f"{self.path}: [detector] needs rows and columns, as no image is read"
            raise ScanError(msg)
        shape = (len(self.exposures), len(self.thresholds_kev), *self.pixels)
        mask = np.zeros(self.pixels, np.uint32)
        return Scan(counts=NoCounts(shape), pixel_mask=mask, **self._facts())

    def scan(self) -> Scan:
        """The scan with the counts of its images, read when asked for.

        Raises
        ------
        ScanError
            If an image is missing, has another shape, or stands for two exposures.
        """
        counts = images_of(self)
        return Scan(
            counts=counts,
            pixel_mask=self._mask(counts.shape[2:]),
            count_limit=counts.count_limit,
            digest=self._digest(image for image, _ in counts.pages.values()),
            **self._facts(),
        )

    def _facts(self) -> dict[str, Any]:
        """All fields of `Scan` that do not depend on images."""
        current = [e.current_ma for e in self.exposures]
        angle = [e.rotation_angle_deg for e in self.exposures]
        notes = []
        if None in current:
            notes.append("the script does not say the tube current")
        if not self.filters:
            notes.append("the script names no filter: an unfiltered tube is assumed")
        if self.sensor_material is None or self.sensor_thickness_mm is None:
            notes.append("the script does not say what the sensor is, or how thick")
        return {
            "thresholds_kev": self.thresholds_kev,
            "role": tuple(e.role for e in self.exposures),
            "thickness_mm": np.array(
                [e.thickness_mm for e in self.exposures], np.float64
            ).reshape(len(self.exposures), len(self.materials)),
            "materials": self.materials,
            "count_time_s": np.array([e.count_time_s for e in self.exposures]),
            "current_ma": None if None in current else np.array(current, np.float64),
            "voltage_kv": self.voltage_kv,
            "target_material": self.target_material,
            "filters": self.filters,
            "sensor_material": self.sensor_material,
            "sensor_thickness_mm": self.sensor_thickness_mm,
            "pixel_size_um": self.pixel_size_um,
            "rotation_angle_deg": None
            if None in angle
            else np.array(angle, np.float64),
            "source": str(self.path),
            "title": self.title,
            "start_time": self.start_time,
            "notes": tuple(notes),
        }

    def _mask(self, shape: tuple[int, ...]) -> NDArray[np.uint32]:
        if self.mask_file is None:
            return np.zeros(shape, np.uint32)
        try:
            layout = image_layout(self.mask_file)
            raw = read_pages(self.mask_file, [0])[0]
        except FileFormatError as error:
            msg = f"{self.path}: pixel_mask: {error}"
            raise FileFormatError(msg) from error
        if raw.shape != shape or layout.pages != 1 or raw.dtype.kind not in "iu":
            msg = (
                f"{self.path}: pixel_mask {self.mask_file} must be one image of "
                f"integers of shape {shape}"
            )
            raise ScanError(msg)
        mask: NDArray[np.uint32] = (raw.astype(np.int64) & 0xFFFFFFFF).astype(np.uint32)
        return mask

    def _digest(self, images: Iterable[ImageFile]) -> str:
        """SHA-256 over the script's and then each image file's own digest."""
        whole = hashlib.sha256(file_digest(self.path).encode())
        for path in dict.fromkeys(image.path for image in images):
            whole.update(file_digest(path).encode())
        return whole.hexdigest()


def read_script(path: str | Path) -> ScanScript:
    """Scan script of a TOML file; its images are not looked for yet.

    Raises
    ------
    ScanError
        If the text is not TOML, or a key is missing, unknown or cannot be; the
        sentence begins with file and line.
    """
    root = read_table(Path(path))
    root.known_keys(_TOP)
    materials = _materials(root)
    source = root.table("source")
    source.known_keys(_SOURCE)
    detector = _detector(root)
    filters = []
    for table in source.tables("filters"):
        table.known_keys(("material", "thickness_mm"))
        filters.append(
            Filter(
                material=table.text("material"),
                thickness_mm=table.number("thickness_mm"),
            )
        )
    thickness = detector.number("sensor_thickness_mm", 0.0)
    return ScanScript(
        path=Path(path),
        title=root.text("title", ""),
        start_time=root.text("start_time", ""),
        materials=materials,
        voltage_kv=source.number("voltage_kv"),
        target_material=source.text("target_material", "W"),
        filters=tuple(filters),
        thresholds_kev=_thresholds(detector),
        sensor_material=detector.text("sensor_material", "") or None,
        sensor_thickness_mm=thickness or None,
        pixel_size_um=_pair(detector, "pixel_size_um"),
        pixels=_pixels(detector),
        mask_file=_mask_file(detector),
        exposures=read_exposures(root, materials),
        virtual=dict(root.values.get("virtual", {})),
    )


def _detector(root: Table) -> Table:
    """The detector's table; what it refers to may be a description for the simulator."""
    own = root.table("detector")
    own.known_keys(_DETECTOR)
    if "use" not in own.values or (own.base is not None and own.base.values):
        return own
    described = own.used()
    sensor = described.values.get("sensor", {})
    electronics = described.values.get("electronics", {})
    values: dict[str, Any] = {}
    if "material" in sensor:
        values["sensor_material"] = sensor["material"]
    if "thickness_um" in sensor:
        thickness = described.checked_number(
            "thickness_um", sensor["thickness_um"], zero=False
        )
        values["sensor_thickness_mm"] = thickness / 1000.0
    if "pitch_um" in sensor:
        values["pixel_size_um"] = [sensor["pitch_um"]] * 2
    if "thresholds_kev" in electronics:
        values["thresholds_kev"] = electronics["thresholds_kev"]
    if not values:
        own.stop("use", f"{described.file} describes no detector")
    return replace(own, base=replace(described, values=values))


def _materials(root: Table) -> tuple[Layer, ...]:
    found: dict[str, Layer] = {}
    for table in root.tables("material"):
        table.known_keys(_MATERIAL)
        name = table.text("name")
        if name in found:
            table.stop("name", f"the material {name!r} is listed twice")
        density = table.number("density_g_cm3")
        if density >= MOST_G_CM3:
            msg = f"density_g_cm3 is {density:g}; nothing has {MOST_G_CM3:g} or more"
            (table.owner("density_g_cm3") or table).stop("density_g_cm3", msg)
        found[name] = Layer(
            name=name,
            formula=table.text("formula"),
            density_g_cm3=density,
        )
    return tuple(found.values())


def _thresholds(detector: Table) -> NDArray[np.float64]:
    value = np.array(detector.numbers("thresholds_kev"))
    if np.any(np.diff(value) <= 0):
        owner = detector.owner("thresholds_kev") or detector
        owner.stop("thresholds_kev", "thresholds_kev must rise one by one")
    return value


def _pair(detector: Table, key: str) -> tuple[float, float] | None:
    owner = detector.owner(key)
    if owner is None:
        return None
    value = detector.numbers(key)
    if len(value) != 2:
        owner.stop(key, f"{key} must be two numbers: row pitch, column pitch")
    return value[0], value[1]


def _pixels(detector: Table) -> tuple[int, int] | None:
    if detector.owner("rows") is None and detector.owner("columns") is None:
        return None
    return detector.whole("rows"), detector.whole("columns")


def _mask_file(detector: Table) -> ImageFile | None:
    owner = detector.owner("pixel_mask")
    if owner is None:
        return None
    dataset = owner.text("pixel_mask_dataset", "")
    return ImageFile(owner.file.parent / owner.text("pixel_mask"), dataset)


def open_scan(path: str | Path) -> Scan:
    """Scan of a NeXus file, or of a scan script (a name that ends in .toml).

    Raises
    ------
    InputError
        If the name is a folder's.
    ScanError
        If the file or the script does not make a scan.
    """
    path = Path(path)
    if path.is_dir():
        msg = f"{path} is a folder; name a scan file or a scan script"
        raise InputError(msg)
    if path.suffix.lower() == ".toml":
        return read_script(path).scan()
    return read_scan(path)
