"""Threshold energies written to, and read from, one HDF5 file of the project's own.

The layout may change with ``FORMAT_VERSION``; a reader refuses what it does not know.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from spectral.calibration.threshold_scan.flags import MEANING
from spectral.calibration.threshold_scan.result import ThresholdEnergies
from spectral.errors import FileFormatError, InputError
from spectral.scans.nexus import opened, plain, written_whole
from spectral.scans.scan_file import file_digest

FORMAT_NAME = "wedgewright threshold energies"
FORMAT_VERSION = 1

ARRAY_UNITS = {
    "offset_kev": "keV",
    "gain_kev": "keV",
    "covariance": "keV2",
    "common_covariance": "keV2",
    "chi_square": "",
    "freedom": "",
    "flags": "",
    "noise_kev": "keV",
    "landmark_kev": "keV",
    "place": "",
    "place_error": "",
    "landmark_flags": "",
    "residual_kev": "keV",
    "common_error_kev": "keV",
    "cloud": "",
}
"""A gain is in keV per unit of setting, which has no unit of its own."""


def write_threshold_energies(energies: ThresholdEnergies, path: str | Path) -> None:
    """Write threshold energies; the file appears only when it is complete."""
    with written_whole(Path(path)) as file:
        file.attrs["format"] = FORMAT_NAME
        file.attrs["format_version"] = FORMAT_VERSION
        file.attrs["landmarks"] = json.dumps(energies.landmarks)
        file.attrs["scanned"] = np.array(energies.scanned)
        file.attrs["assumptions"] = json.dumps(energies.assumptions)
        file.attrs["process"] = json.dumps(energies.process)
        for name, units in ARRAY_UNITS.items():
            value = np.asarray(getattr(energies, name))
            packed = value.size > 4096
            dataset = file.create_dataset(
                name, data=value, compression="gzip" if packed else None, shuffle=packed
            )
            if units:
                dataset.attrs["units"] = units
        for name in ("flags", "landmark_flags"):
            for flag, meaning in MEANING.items():
                file[name].attrs[str(flag.name)] = f"{int(flag)}: {meaning}"


def read_threshold_energies(path: str | Path) -> ThresholdEnergies:
    """Threshold energies of a file, its digest in `process`.

    Raises
    ------
    FileFormatError
        If the file holds something else, a version not known here, or lacks a part.
    """
    path = Path(path)
    with opened(path) as file:
        if plain(file.attrs.get("format", "")) != FORMAT_NAME:
            msg = (
                f"{path}: this file holds no threshold energies; make one with "
                "'wedgewright thresholds'"
            )
            raise FileFormatError(msg)
        version = int(file.attrs.get("format_version", 0))
        if version != FORMAT_VERSION:
            msg = (
                f"{path}: threshold energies of format {version} are not known to this "
                f"version (it reads {FORMAT_VERSION}); fit the scans again"
            )
            raise FileFormatError(msg)
        try:
            arrays: dict[str, Any] = {name: file[name][()] for name in ARRAY_UNITS}
            low, high = (float(v) for v in file.attrs["scanned"])
            found = ThresholdEnergies(
                landmarks=tuple(json.loads(file.attrs["landmarks"])),
                scanned=(low, high),
                assumptions=tuple(json.loads(file.attrs["assumptions"])),
                process=json.loads(file.attrs["process"]),
                **arrays,
            )
        except (KeyError, InputError, OSError) as error:
            msg = f"{path}: the file lacks a part or is damaged ({error}); fit again"
            raise FileFormatError(msg) from error
    return replace(found, process=found.process | {"digest": file_digest(path)})
