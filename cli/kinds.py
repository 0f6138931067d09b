"""What a file holds that was given where a scan is wanted."""

from __future__ import annotations

import tomllib
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING

from spectral.errors import SpectralError

if TYPE_CHECKING:
    from collections.abc import Mapping

SCAN_WORDS = ("scan_path", "script")
"""Arguments of the commands that take a scan or a scan script."""
DESCRIPTIONS = {
    "stacks": "it describes a wedge: name it in a scan script, under [[material]] as "
    "`use`",
    "electronics": "it describes a detector: name it in a scan script, under "
    "[detector] as `use`",
}
"""By a table that only such a file has."""
OTHERS = {
    "calibration": "it holds a calibration, and a scan is wanted here",
    "maps": "it holds maps, and a scan is wanted here",
}
NEITHER = "a scan is a NeXus file (HDF5), or a scan script whose name ends with .toml"
HDF5 = b"\x89HDF\r\n\x1a\n"
"""How such a file begins. Source: HDF5 File Format Specification 3.0, superblock."""


def hint(message: str, arguments: Mapping[str, object]) -> str:
    """What the file that an error is about holds instead of a scan; empty if unknown.

    Parameters
    ----------
    message : str
        The library's error, which begins with the file's name.
    arguments : mapping
        The command's arguments by name.
    """
    for word in SCAN_WORDS:
        path = arguments.get(word)
        if isinstance(path, Path) and message.startswith(f"{path}"):
            return instead(path)
    return ""


def instead(path: Path) -> str:
    """What a file holds that is no scan; empty for a scan, or what nothing can read."""
    try:
        if path.suffix.lower() == ".toml":
            tables = tomllib.loads(path.read_text(encoding="utf-8"))
            return next((DESCRIPTIONS[t] for t in tables if t in DESCRIPTIONS), "")
        with path.open("rb") as file:
            if not HDF5.startswith(file.read(len(HDF5)) or b"?"):
                return NEITHER
        # only an error needs it, and loading it takes a while
        report = import_module("spectral.reporting.report")
        return OTHERS.get(report.file_kind(path), "")
    except (OSError, ValueError, SpectralError):
        return ""
