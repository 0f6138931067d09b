"""A scan script written out, for a scan that is planned and yet to be made."""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence
    from pathlib import Path

    from spectral.scans.scan import Layer
    from spectral.scans.script import ScanScript
    from spectral.scans.script_exposures import ScriptExposure


def script_text(script: ScanScript) -> str:
    """Text of a scan script; files that are not named yet are left to be filled in.

    Repeats are written out one by one. The `[virtual]` table is left out.
    """
    return "\n".join(_lines(script)) + "\n"


def write_script(script: ScanScript, path: Path) -> None:
    """Write the text of a scan script."""
    path.write_text(script_text(script), encoding="utf-8")


def _lines(script: ScanScript) -> Iterator[str]:
    yield f"title = {_text(script.title)}"
    if script.start_time:
        yield f"start_time = {_text(script.start_time)}"
    yield from ("", "[source]", f"voltage_kv = {_number(script.voltage_kv)}")
    yield f"target_material = {_text(script.target_material)}"
    filters = (
        f"{{ material = {_text(f.material)}, thickness_mm = {_number(f.thickness_mm)} }}"
        for f in script.filters
    )
    yield f"filters = [{', '.join(filters)}]"
    yield from _detector_lines(script)
    for material in script.materials:
        yield from _material_lines(material)
    if not any(e.files for e in script.exposures):
        yield from ("", "[defaults]")
        yield '# files = "images/{exposure:03d}_{threshold}.tif"   # fill in, uncomment'
    for exposure in script.exposures:
        yield from _exposure_lines(exposure, script.materials)


def _detector_lines(script: ScanScript) -> Iterator[str]:
    yield from ("", "[detector]")
    yield f"thresholds_kev = {_numbers(script.thresholds_kev.tolist())}"
    if script.sensor_material is not None:
        yield f"sensor_material = {_text(script.sensor_material)}"
    if script.sensor_thickness_mm is not None:
        yield f"sensor_thickness_mm = {_number(script.sensor_thickness_mm)}"
    if script.pixel_size_um is not None:
        yield f"pixel_size_um = {_numbers(script.pixel_size_um)}"
    if script.pixels is not None:
        yield f"rows = {script.pixels[0]}"
        yield f"columns = {script.pixels[1]}"
    if script.mask_file is not None:
        yield f"pixel_mask = {_text(str(script.mask_file.path.absolute()))}"
        if script.mask_file.dataset:
            yield f"pixel_mask_dataset = {_text(script.mask_file.dataset)}"


def _material_lines(material: Layer) -> Iterator[str]:
    yield from ("", "[[material]]", f"name = {_text(material.name)}")
    yield f"formula = {_text(material.formula)}"
    yield f"density_g_cm3 = {_number(material.density_g_cm3)}"


def _exposure_lines(
    exposure: ScriptExposure, materials: Sequence[Layer]
) -> Iterator[str]:
    yield from ("", "[[exposure]]", f"number = {exposure.number}")
    if exposure.step and exposure.repeat == 1:
        yield f"step = {_text(exposure.step)}"
    yield f"role = {_text(exposure.role)}"
    known = [mm for mm in exposure.thickness_mm if not math.isnan(mm)]
    if exposure.role == "wedge" or (exposure.role == "object" and known):
        layers = (
            f"{_text(material.name)} = {_number(mm)}"
            for material, mm in zip(materials, exposure.thickness_mm, strict=True)
            if mm > 0
        )
        yield f"layers_mm = {{ {', '.join(layers)} }}"
    yield f"count_time_s = {_number(exposure.count_time_s / exposure.frames)}"
    if exposure.frames > 1:
        yield f"frames = {exposure.frames}"
    if exposure.current_ma is not None:
        yield f"current_ma = {_number(exposure.current_ma)}"
    if exposure.rotation_angle_deg is not None:
        yield f"rotation_angle_deg = {_number(exposure.rotation_angle_deg)}"
    if exposure.files:
        yield f"files = {_text(exposure.files)}"
        if exposure.dataset:
            yield f"dataset = {_text(exposure.dataset)}"
        order = ", ".join(_text(name) for name in exposure.pages)
        yield f"pages = [{order}]"


def _text(value: str) -> str:
    """Return a basic string of TOML; the escapes of JSON are among its own."""
    return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007F")


def _number(value: float) -> str:
    """Return the shortest number that reads back the same."""
    return repr(float(value))


def _numbers(values: Sequence[float]) -> str:
    return f"[{', '.join(_number(v) for v in values)}]"
