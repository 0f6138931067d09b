"""The exposures of a scan script, with defaults filled in and repeats written out."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from spectral.errors import ScanError
from spectral.scans.scan import MOST_G_CM2, ROLES
from spectral.scans.script_patterns import PAGE_ORDER, pattern_fault

if TYPE_CHECKING:
    from pathlib import Path

    from spectral.scans.scan import Layer
    from spectral.scans.script_table import Table

_DEFAULTS = (
    "count_time_s",
    "frames",
    "current_ma",
    "files",
    "dataset",
    "pages",
)
_EXPOSURE = (
    *_DEFAULTS,
    "step",
    "role",
    "layers_mm",
    "repeats",
    "number",
    "rotation_angle_deg",
)
_MEANT = dict.fromkeys(("image", "images", "image_file", "image_files"), "files")
"""Words that come to mind for a key, but are spelt like another one."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ScriptExposure:
    """One exposure of a scan script.

    Attributes
    ----------
    index : int
        Place in the scan, from 0 on.
    number : int
        What {exposure} stands for in a name pattern.
    step : str
        The step's name, "" if it has none.
    repeat : int
        1 for the first of the step's repeats.
    thickness_mm : tuple of float, one a material, in mm
        NaN for an object.
    count_time_s : float
        Of all frames together, in s.
    current_ma : float or None
    files, dataset : str
        Name patterns; no files yet if "".
    pages : tuple of str
        What the pages of one file run through, slowest first.
    line : int
        Where the exposure stands in the script.
    """

    index: int
    number: int
    step: str
    repeat: int
    role: str
    thickness_mm: tuple[float, ...]
    count_time_s: float
    frames: int
    current_ma: float | None
    rotation_angle_deg: float | None
    files: str
    dataset: str
    pages: tuple[str, ...]
    line: int

    @property
    def label(self) -> str:
        """What a message calls the exposure, counted from 0 as everywhere."""
        name = f" ({self.step})" if self.step else ""
        return f"exposure {self.index}{name}"

    def error(self, path: Path, text: str) -> ScanError:
        """One sentence that begins with file and line."""
        return ScanError(f"{path}, line {self.line}: {text}")


def read_exposures(
    root: Table, materials: tuple[Layer, ...]
) -> tuple[ScriptExposure, ...]:
    """Exposures of a script in order, repeats written out.

    Raises
    ------
    ScanError
        If one is listed twice, a step is named twice, or a key cannot be.
    """
    defaults = root.table("defaults")
    defaults.known_keys(_DEFAULTS, meant=_MEANT)
    tables = root.tables("exposure")
    if not tables:
        root.stop("", "the script lists no exposure; add [[exposure]] tables")
    found: list[ScriptExposure] = []
    by_number: dict[int, int] = {}
    by_step: dict[str, int] = {}
    for table in tables:
        table.known_keys(_EXPOSURE, meant=_MEANT)
        step = table.text("step", "")
        if step and step in by_step:
            msg = f"the step {step!r} has been named before, on line {by_step[step]}"
            table.stop("step", msg)
        by_step[step] = table.line
        first = table.whole("number", found[-1].number + 1 if found else 1)
        for repeat in range(table.whole("repeats", 1)):
            number = first + repeat
            if number in by_number:
                msg = (
                    f"number {number} has been listed before, on line "
                    f"{by_number[number]}"
                )
                table.stop("number", msg)
            by_number[number] = table.line
            found.append(
                _exposure(
                    table,
                    defaults,
                    materials,
                    index=len(found),
                    number=number,
                    repeat=repeat + 1,
                )
            )
    return tuple(found)


def _exposure(
    own: Table,
    defaults: Table,
    materials: tuple[Layer, ...],
    *,
    index: int,
    number: int,
    repeat: int,
) -> ScriptExposure:
    """One exposure, its own keys before the defaults."""
    table = replace(own, base=defaults)
    role = own.text("role")
    if role not in ROLES:
        msg = f"role is {role!r}; it must be one of {', '.join(ROLES)}"
        own.stop("role", msg)
    frames = table.whole("frames", 1)
    return ScriptExposure(
        index=index,
        number=number,
        step=own.text("step", ""),
        repeat=repeat,
        role=role,
        thickness_mm=_thickness(own, role, materials),
        count_time_s=frames * table.number("count_time_s"),
        frames=frames,
        current_ma=_current(own, table, role),
        rotation_angle_deg=own.angle("rotation_angle_deg"),
        files=_pattern(table, "files"),
        dataset=_pattern(table, "dataset"),
        pages=_page_order(table),
        line=own.line,
    )


def _current(own: Table, table: Table, role: str) -> float | None:
    """Tube current; a dark exposure that says nothing has none."""
    if role == "dark" and "current_ma" not in own.values:
        return 0.0
    if table.owner("current_ma") is None:
        return None
    return table.number("current_ma", zero=True)


def _thickness(
    own: Table, role: str, materials: tuple[Layer, ...]
) -> tuple[float, ...]:
    """Thickness of each material in mm."""
    said = own.values.get("layers_mm")
    if said is None:
        if role == "wedge":
            own.stop("", "a wedge exposure needs layers_mm = { NAME = mm }")
        return (math.nan if role == "object" else 0.0,) * len(materials)
    if not isinstance(said, dict):
        own.stop("layers_mm", "layers_mm must be a table: { NAME = mm }")
    if role in ("dark", "open") and any(said.values()):
        article = "an" if role == "open" else "a"
        msg = (
            f"{article} {role} exposure has nothing in the beam, but layers_mm says "
            f"{said}"
        )
        own.stop("layers_mm", msg)
    names = [layer.name for layer in materials]
    for name in said:
        if name not in names:
            known = ", ".join(names) or "none"
            msg = f"layers_mm names {name!r}, which is no [[material]]; known: {known}"
            own.stop("layers_mm", msg)
    mm = {
        name: own.checked_number("layers_mm", value, zero=True)
        for name, value in said.items()
    }
    for layer in materials:
        if 0.1 * mm.get(layer.name, 0.0) * layer.density_g_cm3 > MOST_G_CM2:
            msg = (
                f"layers_mm says {mm[layer.name]:g} mm of {layer.name}, behind which "
                "nothing counts; correct it (1 cm is 10 mm)"
            )
            own.stop("layers_mm", msg)
    return tuple(mm.get(name, 0.0) for name in names)


def _pattern(table: Table, key: str) -> str:
    """Return a name pattern that can be filled in."""
    pattern = table.text(key, "")
    fault = pattern_fault(pattern)
    if fault:
        (table.owner(key) or table).stop(key, fault)
    return pattern


def _page_order(table: Table) -> tuple[str, ...]:
    """What the pages of one file run through, slowest first."""
    owner = table.owner("pages")
    if owner is None:
        return PAGE_ORDER
    value = owner.values["pages"]
    if not isinstance(value, list) or sorted(map(str, value)) != sorted(PAGE_ORDER):
        wanted = ", ".join(f'"{name}"' for name in PAGE_ORDER)
        msg = f"pages must list {wanted}, the one that runs slowest first"
        owner.stop("pages", msg)
    return tuple(value)
