"""A scan read from one NeXus file (and, by `write_scan`, written to one).

The counts stay in the file until they are asked for. Nothing that a file says is
repaired here: what cannot be read stops with a sentence, what is doubtful in the
counts is left for `counts_faults` and the check.
"""

from __future__ import annotations

import hashlib
import re
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.errors import FileFormatError, ScanError
from spectral.scans.nexus import Node, opened, plain
from spectral.scans.scan import (
    MOST_G_CM2,
    MOST_G_CM3,
    ROLES,
    Filter,
    Layer,
    Scan,
)
from spectral.scans.scan_writing import write_scan
from spectral.scans.stored_counts import (
    CountsInFile,
    as_counts,
    counter_stop,
    mostly_fractions,
    sampled_exposures,
    storage_limit,
    upper_end,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["file_digest", "read_scan", "write_scan"]


def read_scan(path: str | Path) -> Scan:
    """Scan of a NeXus file; its counts are read when asked for.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    Scan
        `notes` say what was assumed where the file is silent.

    Raises
    ------
    FileFormatError
        If the file is no HDF5, truncated, lacks a field or a unit, or a field has
        the wrong length.
    ScanError
        If a value cannot be: a role no one knows, a threshold given twice, a wedge
        step without a thickness.
    """
    path = Path(path)
    with opened(path) as file:
        entry = _entry(Node(str(path), file))
        instrument = entry.child("NXinstrument")
        detector = instrument.child("NXdetector")
        thresholds, counts, limit = _channels(path, detector)
        n, _, y, x = counts.shape
        sample = entry.child("NXsample")
        role = _roles(sample, n)
        materials, thickness = _layers(sample, role)
        notes: list[str] = []
        return Scan(
            counts=counts,
            thresholds_kev=thresholds,
            role=role,
            thickness_mm=thickness,
            materials=materials,
            count_time_s=_per_exposure(detector, "count_time", "s", n, zero=False),
            pixel_mask=_pixel_mask(detector, (y, x), notes),
            count_limit=limit,
            rotation_angle_deg=_angles(sample, n),
            source=str(path),
            digest=file_digest(path),
            title=entry.text("title", default=""),
            start_time=entry.text("start_time", default=""),
            **_beam(instrument, n, notes),
            **_sensor(detector, notes),
            notes=tuple(notes),
        )


def file_digest(path: Path) -> str:
    """SHA-256 of a file's bytes, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _entry(root: Node) -> Node:
    """The entry that holds an instrument."""
    found = [e for e in root.children("NXentry") if e.children("NXinstrument")]
    default = plain(root.group.attrs.get("default", ""))
    chosen = [e for e in found if e.group.name == f"/{default.lstrip('/')}"] or found
    if len(chosen) == 1:
        return chosen[0]
    if found:
        msg = (
            f"{root.file}: {len(found)} groups with NX_class 'NXentry' hold an "
            "instrument; name the scan's in the file's attribute 'default'"
        )
        raise FileFormatError(msg)
    msg = (
        f"{root.file}: no group with NX_class 'NXentry' holds an instrument, so "
        "this is not a scan"
    )
    raise FileFormatError(msg)


def _channels(
    path: Path, detector: Node
) -> tuple[NDArray[np.float64], CountsInFile, int]:
    """Thresholds in rising order, their counts, and where counting stops."""
    channels = detector.children("NXdetector_channel")
    if not channels:
        msg = (
            f"{path}: {detector.group.name} holds no group with NX_class "
            "'NXdetector_channel'; one is needed for each threshold"
        )
        raise FileFormatError(msg)
    energy = [c.one_quantity("threshold_energy", "keV") for c in channels]
    order = np.argsort(energy, kind="stable")
    thresholds = np.array([energy[i] for i in order])
    channels = [channels[i] for i in order]
    same = np.flatnonzero(np.diff(thresholds) == 0)
    if len(same):
        names = " and ".join(channels[same[0] + d].group.name for d in (0, 1))
        msg = (
            f"{path}: {names} both have threshold_energy {thresholds[same[0]]:g} keV; "
            "give each threshold its own setting"
        )
        raise ScanError(msg)
    shape = _counts_shape(channels)
    limit = _count_limit(channels, shape[0])
    names_in_file = tuple(f"{c.group.name}/data" for c in channels)
    n, y, x = shape
    counts = CountsInFile(path, names_in_file, (n, len(channels), y, x))
    return thresholds, counts, limit


def _counts_shape(channels: list[Node]) -> tuple[int, int, int]:
    """(exposure, row, column), the same for every threshold."""
    shapes = []
    for channel in channels:
        data = channel.dataset("data")
        if data.ndim != 3 or 0 in data.shape:
            msg = (
                f"{channel.name('data')} has shape {data.shape}; counts need "
                "(exposure, row, column)"
            )
            raise FileFormatError(msg)
        if data.dtype.kind not in "iuf":
            msg = f"{channel.name('data')} holds {data.dtype}, counts are needed"
            raise FileFormatError(msg)
        shapes.append(data.shape)
        if data.shape != shapes[0]:
            msg = (
                f"{channel.name('data')} has shape {data.shape}, but "
                f"{channels[0].name('data')} has {shapes[0]}; all thresholds need "
                "the same exposures and pixels"
            )
            raise FileFormatError(msg)
    n, y, x = shapes[0]
    return int(n), int(y), int(x)


def _count_limit(channels: list[Node], n: int) -> int:
    """Where counting stops: by the stored type, or by the counter as the data show."""
    which = sampled_exposures(n)
    storage = min(storage_limit(c.dataset("data").dtype) for c in channels)
    highest = []
    for channel in channels:
        for i in which:
            try:
                raw = channel.dataset("data")[i]
            except OSError as error:
                msg = f"{channel.name('data')} cannot be read: damaged file ({error})"
                raise FileFormatError(msg) from error
            if mostly_fractions(raw):
                msg = (
                    f"{channel.name('data')} holds fractions, so these are averaged or "
                    "corrected images; store the counts as the detector gave them"
                )
                raise ScanError(msg)
            highest.append(upper_end(as_counts(raw)))
    return counter_stop(np.concatenate(highest), storage=storage)


def _per_exposure(
    node: Node, field: str, unit: str, n: int, *, zero: bool
) -> NDArray[np.float64]:
    """One number an exposure; a single number stands for all of them."""
    value = node.quantity(field, unit)
    if value.size == 1:
        value = np.full(n, value.ravel()[0])
    if value.shape != (n,):
        msg = f"{node.name(field)} has shape {value.shape}, the counts need ({n},)"
        raise FileFormatError(msg)
    good = np.isfinite(value) & ((value >= 0) if zero else (value > 0))
    if not good.all():
        i = int(np.flatnonzero(~good)[0])
        wanted = "zero or more" if zero else "more than zero"
        msg = (
            f"{node.name(field)} is {value[i]:g} {unit} in exposure {i}; it must be "
            f"{wanted}"
        )
        raise ScanError(msg)
    return value


def _roles(sample: Node, n: int) -> tuple[str, ...]:
    """Role of each exposure."""
    role = sample.texts("role")
    if len(role) != n:
        msg = f"{sample.name('role')} has {len(role)} entries, the counts need {n}"
        raise FileFormatError(msg)
    for i, name in enumerate(role):
        if name not in ROLES:
            msg = (
                f"{sample.name('role')} of exposure {i} is {name!r}; it must be one "
                f"of {', '.join(ROLES)}"
            )
            raise ScanError(msg)
    return role


def _layers(
    sample: Node, role: tuple[str, ...]
) -> tuple[tuple[Layer, ...], NDArray[np.float64]]:
    """Materials of the scan and what of each stood in the beam."""
    n = len(role)
    if not sample.has("material") and "wedge" not in role:
        return (), np.zeros((n, 0))
    names = sample.texts("material")
    formulas = sample.texts("formula")
    density = np.atleast_1d(sample.quantity("density", "g/cm3"))
    m = len(names)
    for field, shape in (("formula", (len(formulas),)), ("density", density.shape)):
        if shape != (m,):
            msg = (
                f"{sample.name(field)} has {' x '.join(map(str, shape))} entries, "
                f"there are {m} materials"
            )
            raise FileFormatError(msg)
    if "" in names:
        msg = f"{sample.name('material')} has an empty name; name each material"
        raise ScanError(msg)
    possible = (density > 0) & (density < MOST_G_CM3)
    if not possible.all():
        j = int(np.argmin(possible))
        msg = (
            f"{sample.name('density')} of {names[j]} is {density[j]:g} g/cm3; it must "
            f"be more than zero and less than {MOST_G_CM3:g}: is its unit right?"
        )
        raise ScanError(msg)
    repeated = {name for name in names if names.count(name) > 1}
    if repeated:
        msg = f"{sample.name('material')} names {repeated.pop()} twice"
        raise ScanError(msg)
    thickness = sample.quantity("thickness", "mm")
    if thickness.shape != (n, m):
        msg = (
            f"{sample.name('thickness')} has shape {thickness.shape}; "
            f"{n} exposures and {m} materials need ({n}, {m})"
        )
        raise FileFormatError(msg)
    _check_thickness(sample.name("thickness"), thickness, density, role, names)
    layers = zip(names, formulas, density.tolist(), strict=True)
    return (
        tuple(Layer(name=a, formula=f, density_g_cm3=d) for a, f, d in layers),
        thickness,
    )


def _check_thickness(
    field: str,
    thickness: NDArray[np.float64],
    density: NDArray[np.float64],
    role: tuple[str, ...],
    names: tuple[str, ...],
) -> None:
    """Refuse thicknesses that cannot be, and unknown ones where they must be known."""
    known = np.array([r != "object" for r in role])[:, None]
    wrong = (thickness < 0) | np.isinf(thickness) | (known & np.isnan(thickness))
    if wrong.any():
        i, j = (int(v) for v in np.argwhere(wrong)[0])
        msg = (
            f"{field} of {names[j]} in exposure {i} ({role[i]}) is "
            f"{thickness[i, j]:g} mm; it must be zero or more, and only an object's "
            "may be unknown (NaN)"
        )
        raise ScanError(msg)
    opaque = 0.1 * thickness * density > MOST_G_CM2
    if opaque.any():
        i, j = (int(v) for v in np.argwhere(opaque)[0])
        msg = (
            f"{field} of {names[j]} in exposure {i} ({role[i]}) is "
            f"{thickness[i, j]:g} mm, behind which nothing counts; correct it or its "
            "unit"
        )
        raise ScanError(msg)
    opened_up = np.array([r == "open" for r in role])[:, None] & (thickness > 0)
    if opened_up.any():
        i, j = (int(v) for v in np.argwhere(opened_up)[0])
        msg = (
            f"{field} of {names[j]} in exposure {i} is {thickness[i, j]:g} mm, but its "
            "role is open; make it zero, or give the exposure the role wedge"
        )
        raise ScanError(msg)


def _beam(instrument: Node, n: int, notes: list[str]) -> dict[str, Any]:
    """Tube and filtration."""
    source = instrument.child("NXsource")
    current = None
    if source.has("current"):
        current = _per_exposure(source, "current", "mA", n, zero=True)
    else:
        notes.append("the scan does not say the tube current")
    filters = [
        Filter(
            material=node.text("type"),
            thickness_mm=node.one_quantity("thickness", "mm"),
        )
        for node in sorted(
            instrument.children("NXattenuator"), key=lambda c: _natural(c.group.name)
        )
    ]
    if not filters:
        notes.append("the scan names no beam filter: an unfiltered tube is assumed")
    return {
        "voltage_kv": source.one_quantity("voltage", "kV"),
        "target_material": source.text("target_material"),
        "current_ma": current,
        "filters": tuple(filters),
    }


def _natural(name: str) -> tuple[tuple[int, str], ...]:
    """Sort key that puts filter_2 before filter_10."""
    parts = re.findall(r"\d+|\D+", name)
    return tuple((int(p), "") if p.isdigit() else (-1, p) for p in parts)


def _sensor(detector: Node, notes: list[str]) -> dict[str, Any]:
    """Sensor and pixel size, None where the file does not say."""
    material = detector.text("sensor_material", default="") or None
    thickness = None
    if detector.has("sensor_thickness"):
        thickness = detector.one_quantity("sensor_thickness", "mm")
    if material is None or thickness is None:
        notes.append("the scan does not say what the sensor is made of, or how thick")
    size = None
    if detector.has("x_pixel_size") and detector.has("y_pixel_size"):
        size = (
            detector.one_quantity("y_pixel_size", "um"),
            detector.one_quantity("x_pixel_size", "um"),
        )
    else:
        notes.append("the scan does not say the pixel size")
    return {
        "sensor_material": material,
        "sensor_thickness_mm": thickness,
        "pixel_size_um": size,
    }


def _pixel_mask(
    detector: Node, shape: tuple[int, int], notes: list[str]
) -> NDArray[np.uint32]:
    """NXdetector's mask; all good where there is none."""
    if not detector.has("pixel_mask"):
        notes.append("the scan has no pixel mask: every pixel is taken as usable")
        return np.zeros(shape, np.uint32)
    raw = detector.values("pixel_mask")
    if raw.shape != shape or raw.dtype.kind not in "iub":
        msg = (
            f"{detector.name('pixel_mask')} has shape {raw.shape} and type "
            f"{raw.dtype}; the pixels need integers of shape {shape}"
        )
        raise FileFormatError(msg)
    return (raw.astype(np.int64) & 0xFFFFFFFF).astype(np.uint32)


def _angles(sample: Node, n: int) -> NDArray[np.float64] | None:
    """Rotation angle of each exposure, if the file says it."""
    if not sample.has("rotation_angle"):
        return None
    angle = sample.quantity("rotation_angle", "deg")
    if angle.shape != (n,):
        field = sample.name("rotation_angle")
        msg = f"{field} has shape {angle.shape}, the counts need ({n},)"
        raise FileFormatError(msg)
    return angle
