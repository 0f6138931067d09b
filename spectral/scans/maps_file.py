"""Areal-density maps written to, and read from, one NeXus file."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np

import spectral
from spectral.errors import FileFormatError, InputError
from spectral.scans.flags import MEANING
from spectral.scans.maps import Maps
from spectral.scans.nexus import Node, new_group, opened, plain, put, written_whole

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

#: Per-exposure fields of `Maps`, with their units in the file.
FIELD_UNITS: dict[str, str] = {
    "areal_density": "g/cm2",
    "areal_density_errors": "g/cm2",
    "covariance": "g2/cm4",
    "calibration_errors": "g/cm2",
    "deviance": "",
    "flags": "",
}
_OWN_FIELDS = ("program", "version", "date")
_CHUNK_PIXELS = 64
CHUNK_EXPOSURES = 16
"""Most exposures in a chunk: reading one exposure reads its neighbours in the chunk."""


def write_maps(maps: Maps, path: str | Path) -> None:
    """Write maps as one NeXus file, which appears only when it is complete.

    Parameters
    ----------
    maps : Maps
        Each entry of `process` becomes a note of the record, but for program,
        version and date, which have fields of their own.
    path : str or Path

    Raises
    ------
    InputError
        If a pixel without an estimate carries no flag, or a flag has no meaning.
    """
    check_flags(maps)
    with written_whole(Path(path)) as file:
        create_maps(
            file,
            material=maps.material,
            exposure=maps.exposure,
            pixels=maps.deviance.shape[1:],
        )
        fill_maps(file, maps, start=0)
        write_process(file, maps.process)


def check_flags(maps: Maps) -> None:
    """Refuse NaN that no flag explains, and flags that no text explains."""
    missing = ~np.isfinite(maps.areal_density).all(1) & (maps.flags == 0)
    if missing.any():
        n, y, x = (int(v) for v in np.argwhere(missing)[0])
        msg = (
            f"areal_density of exposure {maps.exposure[n]} is not a number in row {y}, "
            f"column {x} ({int(missing.sum())} such), but no flag says why"
        )
        raise InputError(msg)
    known = np.uint16(sum(int(flag) for flag in MEANING))
    if (maps.flags & ~known).any():
        msg = f"flags hold bits beyond {known:#x}, which have no meaning in PixelFlag"
        raise InputError(msg)


def create_maps(
    file: h5py.File,
    *,
    material: Sequence[str],
    exposure: NDArray[np.int32],
    pixels: tuple[int, ...],
    at_once: int = CHUNK_EXPOSURES,
) -> None:
    """Lay out an empty maps file, to be filled some exposures at a time.

    Chunks of up to sixteen exposures by 64 x 64 pixels let a whole exposure and a
    single pixel's series both open without reading the rest. Filled `at_once`
    exposures at a time, each chunk is compressed once.
    """
    together = min(at_once, CHUNK_EXPOSURES)
    n, m = len(exposure), len(material)
    file.attrs["default"] = "entry"
    entry = new_group(file, "entry", "NXentry")
    entry.attrs["default"] = "maps"
    group = new_group(entry, "maps", "NXdata")
    group.attrs["signal"] = "areal_density"
    group.attrs["axes"] = np.array(
        ["exposure", "material", ".", "."], dtype=h5py.string_dtype()
    )
    put(group, "exposure", np.asarray(exposure, np.int32))
    group["exposure"].attrs["long_name"] = "index of the exposure in its scan"
    put(group, "material", tuple(material))
    inner = {
        "areal_density": (m,),
        "areal_density_errors": (m,),
        "covariance": (m * (m + 1) // 2,),
        "calibration_errors": (m,),
        "deviance": (),
        "flags": (),
    }
    tile = (*(min(p, _CHUNK_PIXELS) for p in pixels),)
    for name, units in FIELD_UNITS.items():
        whole = name == "flags"
        dataset = group.create_dataset(
            name,
            (n, *inner[name], *pixels),
            np.uint16 if whole else np.float32,
            chunks=(min(n, together), *(1 for _ in inner[name]), *tile),
            compression="gzip",
            compression_opts=1,
            shuffle=True,
            fillvalue=0 if whole else np.nan,
        )
        if units:
            dataset.attrs["units"] = units
    group["deviance"].attrs["long_name"] = "deviance per degree of freedom"
    group["covariance"].attrs["long_name"] = "upper triangle, row by row"
    _explain_flags(group["flags"])


def _explain_flags(flags: h5py.Dataset) -> None:
    """Write each bit's name and meaning beside the flags.

    `flag_masks` and `flag_meanings` are the CF conventions' attributes for bit
    fields (https://cfconventions.org, section 3.5); the sentences are ours.
    """
    flags.attrs["flag_masks"] = np.array([int(flag) for flag in MEANING], np.uint16)
    flags.attrs["flag_meanings"] = " ".join(str(flag.name) for flag in MEANING)
    for flag, meaning in MEANING.items():
        flags.attrs[str(flag.name)] = meaning


def fill_maps(file: h5py.File, maps: Maps, *, start: int) -> None:
    """Write some exposures' maps into a file laid out by `create_maps`."""
    group = file["entry/maps"]
    stop = start + len(maps.exposure)
    for name in FIELD_UNITS:
        group[name][start:stop] = getattr(maps, name)


def write_process(file: h5py.File, process: dict[str, str]) -> None:
    """Write the record of the run: what made the maps, from what, and how."""
    record = {
        "program": "wedgewright",
        "version": spectral.__version__,
        "date": datetime.now(UTC).isoformat(timespec="seconds"),
        **process,
    }
    group = new_group(file["entry"], "process", "NXprocess")
    for name in _OWN_FIELDS:
        put(group, name, record.pop(name))
    for i, (subject, text) in enumerate(record.items(), start=1):
        note = new_group(group, f"note_{i}", "NXnote")
        put(note, "type", "text/plain")
        put(note, "description", subject)
        put(note, "data", text)


def read_maps(
    path: str | Path, *, which: Sequence[int] | NDArray[np.int64] | None = None
) -> Maps:
    """Maps of a file.

    Parameters
    ----------
    path : str or Path
    which : sequence of int, optional
        Positions along the exposure axis to read; all by default.

    Raises
    ------
    FileFormatError
        If the file holds no maps, a field is missing or has the wrong shape, or a
        pixel without an estimate carries no flag.
    """
    with opened(Path(path)) as file:
        entries = Node(str(path), file).children("NXentry")
        groups = [g for entry in entries for g in entry.children("NXdata")]
        group = next((g for g in groups if g.has("areal_density")), None)
        if group is None:
            msg = f"{path}: no NXdata group holds areal_density, so these are no maps"
            raise FileFormatError(msg)
        exposure = group.values("exposure").astype(np.int32)
        select = _selection(path, which, len(exposure))
        fields = {name: _field(group, name, select) for name in FIELD_UNITS}
        material = group.texts("material")
        process: dict[str, str] = {}
        for entry in entries:
            for node in entry.children("NXprocess"):
                process |= _process(node)
    if select is not None:
        exposure = exposure[select]
    try:
        maps = Maps(material=material, exposure=exposure, process=process, **fields)
        check_flags(maps)
    except InputError as error:
        msg = (
            f"{path}: {error}; the maps file is damaged or was changed: decompose again"
        )
        raise FileFormatError(msg) from error
    return maps


def _selection(
    path: str | Path, which: Sequence[int] | NDArray[np.int64] | None, n: int
) -> NDArray[np.int64] | None:
    if which is None:
        return None
    select = np.asarray(which, dtype=np.int64)
    if select.size and (select.min() < 0 or select.max() >= n):
        msg = f"{path} holds {n} exposures, positions 0 to {n - 1}; {which} was asked"
        raise InputError(msg)
    return select


def _field(group: Node, name: str, select: NDArray[np.int64] | None) -> NDArray[Any]:
    """One field, or the asked exposures of it."""
    kind = np.uint16 if name == "flags" else np.float32
    dataset = group.dataset(name)
    try:
        if select is None:
            return np.asarray(dataset[()], kind)
        return np.array([dataset[int(i)] for i in select], kind).reshape(
            len(select), *dataset.shape[1:]
        )
    except (OSError, IndexError, ValueError) as error:
        msg = f"{group.name(name)} cannot be read: the file is damaged ({error})"
        raise FileFormatError(msg) from error


def _process(node: Node) -> dict[str, str]:
    """The record of the run as it was given to `write_maps`."""
    record = {name: node.text(name, default="") for name in _OWN_FIELDS}
    for note in node.children("NXnote"):
        record[note.text("description", default=plain(note.group.name))] = note.text(
            "data", default=""
        )
    return record
