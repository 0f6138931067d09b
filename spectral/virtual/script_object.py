"""What a scan script puts in the beam as the object: plain shapes and maps.

Each ``[[virtual.object]]`` puts one material on a part of the field, the later ones
on top of the earlier ones::

    [[virtual.object]]
    shape = "disc"                # or "rectangle", or "ramp"
    material = "steel"            # of [[material]], or of [[virtual.material]]
    centre_mm = [1.2, 2.0]        # row, column; from the field's first corner
    radius_mm = 0.3
    thickness_mm = 0.5            # or areal_density_g_cm2 = 0.4
    displaces = "PMMA"            # as many mm of which make room for it
    region = "large pin"          # what the truth calls the place

A rectangle has ``row_mm`` and ``column_mm``, each [from, to], each the whole field if
it is absent. A ramp has them too, two thicknesses, and ``along = "rows"`` (or
"columns"). In place of a shape, ``file`` names an image of mm (TIFF, .npy, or HDF5
with ``dataset``), or of g/cm2 with ``holds = "g/cm2"``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import FileFormatError
from spectral.scans.image_files import ImageFile, image_layout, read_pages

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from numpy.typing import NDArray

    from spectral.scans.scan import Layer
    from spectral.scans.script_table import Table

SHAPES = ("rectangle", "disc", "ramp")
BACKGROUND = "background"
_AMOUNT = ("thickness_mm", "areal_density_g_cm2")
_WHERE = {
    "rectangle": ("row_mm", "column_mm"),
    "ramp": ("row_mm", "column_mm", "along"),
    "disc": ("centre_mm", "radius_mm"),
    "": ("file", "dataset", "holds"),
}
_MM_TO_CM = 0.1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FieldOfView:
    """Pixels of a scan and where they lie, in the mm of the script.

    Attributes
    ----------
    rows, columns : int
    row_mm, column_mm : arrays, shapes (row,) and (column,), in mm
        Middle of each row and column from the first one's outer edge.
    """

    rows: int
    columns: int
    row_mm: NDArray[np.float64]
    column_mm: NDArray[np.float64]

    @classmethod
    def of(
        cls,
        pixels: tuple[int, int],
        said: tuple[int, int],
        pixel_size_um: tuple[float, float],
    ) -> FieldOfView:
        """Field of some pixels that stands for the one of which the script speaks."""
        size = [
            float(1e-3 * pitch * whole / own)
            for own, whole, pitch in zip(pixels, said, pixel_size_um, strict=True)
        ]
        return cls(
            rows=pixels[0],
            columns=pixels[1],
            row_mm=np.asarray(size[0] * (np.arange(pixels[0]) + 0.5)),
            column_mm=np.asarray(size[1] * (np.arange(pixels[1]) + 0.5)),
        )

    def inside(self, table: Table) -> NDArray[np.bool_]:
        """Pixels whose middle lies in row_mm and column_mm of a table."""
        found = np.ones((self.rows, self.columns), np.bool_)
        for key, place in (
            ("row_mm", self.row_mm[:, None]),
            ("column_mm", self.column_mm[None, :]),
        ):
            if table.owner(key) is not None:
                first, last = pair(table, key)
                found &= (place >= first) & (place < last)
        return found


def object_maps(
    tables: Sequence[Table], materials: Sequence[Layer], field: FieldOfView
) -> tuple[NDArray[np.float64], NDArray[np.uint16], tuple[str, ...]]:
    """Areal densities of the object, and its parts by name.

    Returns
    -------
    areal_density : array, shape (material, row, column), in g/cm2
    region : array of uint16, shape (row, column)
    region_name : tuple of str
        "background" first.

    Raises
    ------
    ScanError
        With file and line, if a key cannot be.
    """
    names = [layer.name for layer in materials]
    areal = np.zeros((len(materials), field.rows, field.columns))
    region = np.zeros(areal.shape[1:], np.uint16)
    called = [BACKGROUND]
    for table in tables:
        shape = table.text("shape", "")
        if shape and shape not in SHAPES:
            msg = f"shape is {shape!r}; it must be one of {', '.join(SHAPES)}"
            table.stop("shape", msg)
        if not shape and table.owner("file") is None:
            table.stop("", "an object needs shape = or file =")
        amounts = _AMOUNT if shape else ()
        table.known_keys(
            ("shape", "material", "displaces", "region", *amounts, *_WHERE[shape])
        )
        index = named(table, "material", names)
        density = materials[index].density_g_cm3
        inside, mm = _drawn(table, shape, density, field)
        areal[index] += mm * _MM_TO_CM * density
        if table.owner("displaces") is not None:
            _make_room(table, names, materials, areal, mm)
        label = table.text("region", "")
        if label:
            if label not in called:
                called.append(label)
            region[inside] = called.index(label)
    return areal, region, tuple(called)


def _make_room(
    table: Table,
    names: Sequence[str],
    materials: Sequence[Layer],
    areal: NDArray[np.float64],
    mm: NDArray[np.float64],
) -> None:
    """Take as many mm of another material away."""
    if table.owner("areal_density_g_cm2") is not None:
        table.stop("displaces", "displaces needs thickness_mm: g/cm2 fill no room")
    other = named(table, "displaces", names)
    taken = mm * _MM_TO_CM * materials[other].density_g_cm3
    if np.any(taken > areal[other] * (1.0 + 1e-9)):
        msg = f"there is less {names[other]} than is to be displaced"
        table.stop("displaces", msg)
    areal[other] = np.maximum(areal[other] - taken, 0.0)


def _drawn(
    table: Table, shape: str, density: float, field: FieldOfView
) -> tuple[NDArray[np.bool_], NDArray[np.float64]]:
    """Pixels of one entry and its thickness in mm, 0 outside."""
    if not shape:
        mm = _from_file(table, density, field)
        return mm > 0.0, mm
    if shape == "disc":
        row, column = pair(table, "centre_mm", rising=False)
        away = np.hypot(field.row_mm[:, None] - row, field.column_mm - column)
        inside = away < table.number("radius_mm")
    else:
        inside = field.inside(table)
    key = _AMOUNT[1] if table.owner(_AMOUNT[1]) is not None else _AMOUNT[0]
    per_mm = 1.0 if key == _AMOUNT[0] else 1.0 / (_MM_TO_CM * density)
    if shape != "ramp":
        return inside, np.where(inside, table.number(key) * per_mm, 0.0)
    first, last = pair(table, key, rising=False)
    along = table.text("along", "rows")
    if along not in ("rows", "columns"):
        table.stop("along", f'along is {along!r}; it must be "rows" or "columns"')
    place = field.row_mm[:, None] if along == "rows" else field.column_mm[None, :]
    place = np.broadcast_to(place, inside.shape)
    held = place[inside]
    if held.size:
        begin, end = float(held.min()), float(held.max())
        share = (place - begin) / max(end - begin, 1e-12)
        rise = per_mm * (first + (last - first) * share)
        return inside, np.where(inside, rise, 0.0)
    return inside, np.zeros(inside.shape)


def _from_file(table: Table, density: float, field: FieldOfView) -> NDArray[np.float64]:
    """Thickness in mm of an image; the nearest pixels if the field is another size."""
    path = table.file.parent / table.text("file")
    holds = table.text("holds", "mm")
    if holds not in ("mm", "g/cm2"):
        table.stop("holds", f'holds is {holds!r}; it must be "mm" or "g/cm2"')
    try:
        image = _image(path, table.text("dataset", "")).astype(np.float64)
    except (FileFormatError, ValueError, OSError) as error:
        table.stop("file", f"{path} gives no map: {error}")
    if image.ndim != 2 or not np.all(np.isfinite(image)) or image.min() < 0.0:
        msg = f"{path} must be one image (row, column) of finite numbers from 0 on"
        table.stop("file", msg)
    rows = ((np.arange(field.rows) + 0.5) * image.shape[0] / field.rows).astype(int)
    columns = (
        (np.arange(field.columns) + 0.5) * image.shape[1] / field.columns
    ).astype(int)
    picked = image[np.ix_(rows, columns)]
    return picked if holds == "mm" else picked / (_MM_TO_CM * density)


def _image(path: Path, dataset: str) -> NDArray[np.float64]:
    if path.suffix == ".npy":
        return np.asarray(np.load(path, allow_pickle=False))
    file = ImageFile(path, dataset)
    layout = image_layout(file)
    if layout.pages != 1:
        msg = f"it holds {layout.pages} images, one is wanted"
        raise FileFormatError(msg)
    return np.asarray(read_pages(file, [0])[0])


def named(table: Table, key: str, names: Sequence[str]) -> int:
    """Index of the material that a key names."""
    name = table.text(key)
    if name not in names:
        msg = (
            f"{key} names {name!r}, which is neither a [[material]] nor a "
            f"[[virtual.material]]; known: {', '.join(names) or 'none'}"
        )
        table.stop(key, msg)
    return names.index(name)


def pair(table: Table, key: str, *, rising: bool = True) -> tuple[float, float]:
    """Two numbers from zero on."""
    owner = table.owner(key)
    if owner is None:
        table.stop("", f"an object of this shape needs {key}")
    value = owner.values[key]
    if not isinstance(value, list) or len(value) != 2:
        owner.stop(key, f"{key} must be two numbers, not {value!r}")
    first, last = (owner.checked_number(key, item, zero=True) for item in value)
    if rising and last <= first:
        owner.stop(key, f"{key} must rise, not {value!r}")
    return first, last
