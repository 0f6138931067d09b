"""A report about a scan, a calibration or maps, whichever a file is."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING

from spectral.calibration.calibration_file import FORMAT_NAME, read_calibration
from spectral.calibration.result import Calibration
from spectral.errors import FileFormatError, InputError
from spectral.reporting.calibration_page import calibration_page
from spectral.reporting.drawing import page_style
from spectral.reporting.maps_blocks import MapsBlocks
from spectral.reporting.maps_page import maps_page
from spectral.reporting.scan_page import scan_page
from spectral.scans.maps import Maps
from spectral.scans.nexus import Node, opened, plain
from spectral.scans.scan import Scan
from spectral.scans.script import open_scan

if TYPE_CHECKING:
    from spectral.reporting.page import Page
    from spectral.scans.scan_check import ScanCheck

Source = Scan | Calibration | Maps | str | Path


def report(
    source: Source,
    *,
    exposure: int | None = None,
    row: int | None = None,
    check: ScanCheck | None = None,
) -> str:
    """One self-contained HTML page about a scan, a calibration or maps.

    Parameters
    ----------
    source : Scan, Calibration, Maps, or the path of a file that holds one
    exposure : int, optional
        Of maps: show only this exposure (its index in the scan) instead of the mean
        over all of them.
    row : int, optional
        Of maps: the row of the profile; the middle one by default.
    check : ScanCheck, optional
        Of a scan: its check, if there is one already.

    Returns
    -------
    str
        The page's text.

    Raises
    ------
    InputError
        If an option does not go with the source, or names what is not in it.
    FileFormatError
        If a file is none of the three.
    """
    return report_page(source, exposure=exposure, row=row, check=check).html()


def write_report(
    source: Source,
    out_path: str | Path,
    *,
    exposure: int | None = None,
    row: int | None = None,
    check: ScanCheck | None = None,
) -> Page:
    """Write the page of `report`; the file appears only when it is complete.

    Returns
    -------
    Page
        What was written, for a summary.
    """
    page = report_page(source, exposure=exposure, row=row, check=check)
    write_whole(Path(out_path), page.html())
    return page


def report_page(
    source: Source,
    *,
    exposure: int | None = None,
    row: int | None = None,
    check: ScanCheck | None = None,
) -> Page:
    """The page of `report` before it becomes text; arguments as there."""
    name = ""
    if isinstance(source, (str, Path)):
        name = str(source)
        source = _found_in(Path(source))
    if not isinstance(source, (Maps, Path)) and (exposure, row) != (None, None):
        msg = "exposure and row choose among maps; a scan or calibration has no such"
        raise InputError(msg)
    with page_style():
        if isinstance(source, Scan):
            return scan_page(source, check=check)
        if isinstance(source, Calibration):
            return calibration_page(source, name=name)
        return maps_page(MapsBlocks(source, exposure=exposure), row=row)


def _found_in(path: Path) -> Scan | Calibration | Path:
    """What a file holds; maps stay in their file, which may be long."""
    kind = file_kind(path)
    if kind == "calibration":
        return read_calibration(path)
    return open_scan(path) if kind == "scan" else path


def file_kind(path: Path) -> str:
    """Whether a file holds a "scan" (or scan script), a "calibration" or "maps".

    Raises
    ------
    FileFormatError
        If it is none of the three.
    """
    if path.suffix.lower() == ".toml":
        return "scan"
    with opened(path) as file:
        if plain(file.attrs.get("format", "")) == FORMAT_NAME:
            return "calibration"
        return _nexus_kind(Node(str(path), file))


def _nexus_kind(root: Node) -> str:
    for entry in root.children("NXentry"):
        if any(g.has("areal_density") for g in entry.children("NXdata")):
            return "maps"
        if entry.children("NXinstrument"):
            return "scan"
    msg = (
        f"{root.file}: this file holds no scan, calibration or maps; give one that "
        "wedgewright wrote or reads"
    )
    raise FileFormatError(msg)


def write_whole(path: Path, text: str) -> None:
    """Write a page that appears under its name only when it is complete."""
    handle, name = tempfile.mkstemp(
        prefix=f".{path.name}.", suffix=".part", dir=path.parent
    )
    part = Path(name)
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write(text)
        mask = os.umask(0)
        os.umask(mask)
        part.chmod(0o666 & ~mask)
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)
