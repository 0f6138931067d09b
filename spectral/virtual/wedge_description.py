"""A wedge described by a TOML text: materials, plates, and the stacks made of them."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.scan import Layer
from spectral.scans.script_table import read_table

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WedgeDescription:
    """What a wedge is made of.

    Attributes
    ----------
    name, note : str
    materials : tuple of Layer
    plates_mm : tuple of tuple of float, one a material, in mm
        Plates at hand, thinnest first or in any order; empty if not said.
    thickness_mm : array, shape (stack, material), in mm
    """

    name: str
    note: str
    materials: tuple[Layer, ...]
    plates_mm: tuple[tuple[float, ...], ...]
    thickness_mm: NDArray[np.float64]

    @property
    def areal_density(self) -> NDArray[np.float64]:
        """What each stack puts in the beam, shape (stack, material), in g/cm2."""
        density = np.array([layer.density_g_cm3 for layer in self.materials])
        return np.asarray(0.1 * self.thickness_mm * density)


def read_wedge(path: str | Path) -> WedgeDescription:
    """Wedge of a TOML text with [[material]] tables and [stacks].

    Raises
    ------
    ScanError
        If a key is missing, unknown or cannot be, or a stack has another number of
        materials; the sentence begins with file and line.
    """
    root = read_table(Path(path))
    root.known_keys(("name", "note", "material", "stacks"))
    materials, plates = [], []
    for table in root.tables("material"):
        table.known_keys(("name", "formula", "density_g_cm3", "plates_mm"))
        materials.append(
            Layer(
                name=table.text("name"),
                formula=table.text("formula"),
                density_g_cm3=table.number("density_g_cm3"),
            )
        )
        said = table.owner("plates_mm")
        plates.append(tuple(table.numbers("plates_mm")) if said else ())
    stacks = root.table("stacks")
    stacks.known_keys(("thickness_mm",))
    rows = stacks.values.get("thickness_mm", [])
    if not isinstance(rows, list) or not rows:
        stacks.stop("thickness_mm", "[stacks] needs thickness_mm, one row a stack")
    for number, row in enumerate(rows, start=1):
        if not isinstance(row, list) or len(row) != len(materials):
            msg = (
                f"stack {number} is {row!r}; it must list {len(materials)} "
                "thicknesses in mm, one a material"
            )
            stacks.stop("thickness_mm", msg)
        for value in row:
            stacks.checked_number("thickness_mm", value, zero=True)
    return WedgeDescription(
        name=root.text("name", ""),
        note=root.text("note", ""),
        materials=tuple(materials),
        plates_mm=tuple(plates),
        thickness_mm=np.array(rows, np.float64),
    )
