"""A threshold scan read from, and written to, one NeXus file.

    /entry                            NXentry     title, start_time
    /entry/instrument/source          NXsource    probe = "x-ray", type, name,
                                                  target_material, voltage (kV)
    /entry/instrument/filter_1 ...    NXattenuator  type, thickness (mm)
    /entry/instrument/detector        NXdetector  sensor_material, sensor_thickness,
                                                  x_pixel_size, y_pixel_size,
                                                  count_time (s), pixel_mask
    .../detector/threshold_k_channel  NXdetector_channel
                                      threshold_setting float[n], no unit
                                      data uint32[n,y,x]: counts above each setting
                                      nominal_scale float[2]: keV at setting 0, keV per
                                      unit of setting (may be absent)
    /entry/sample                     NXsample    role (`SOURCE_KINDS`),
                                                  chemical_formula (element), or
                                                  name (nuclide)

One file holds one source. All channels share their settings.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.errors import FileFormatError, InputError, ScanError
from spectral.scans.nexus import Node, new_group, opened, put, written_whole
from spectral.scans.scan import Filter
from spectral.scans.scan_file import file_digest
from spectral.scans.threshold_scan import LineSource, ThresholdScan

if TYPE_CHECKING:
    import h5py
    from numpy.typing import NDArray

TUBE_TYPE = "Fixed Tube X-ray"
NUCLIDE_TYPE = "Radionuclide"


def write_threshold_scan(scan: ThresholdScan, path: str | Path) -> None:
    """Write a threshold scan; the file appears only when it is complete."""
    with written_whole(Path(path)) as file:
        file.attrs["default"] = "entry"
        entry = new_group(file, "entry", "NXentry")
        put(entry, "title", scan.title)
        if scan.start_time:
            put(entry, "start_time", scan.start_time)
        instrument = new_group(entry, "instrument", "NXinstrument")
        _write_source(entry, instrument, scan.source)
        _write_detector(instrument, scan)
        entry.attrs["default"] = "counts"
        plot = new_group(entry, "counts", "NXdata")
        plot.attrs["signal"] = "above_threshold"
        plot["above_threshold"] = entry["instrument/detector/threshold_1_channel/data"]


def _write_source(entry: h5py.Group, instrument: h5py.Group, line: LineSource) -> None:
    source = new_group(instrument, "source", "NXsource")
    put(source, "probe", "x-ray")
    nuclide = line.kind == "radionuclide"
    put(source, "type", NUCLIDE_TYPE if nuclide else TUBE_TYPE)
    if line.voltage_kv is not None:
        put(source, "voltage", line.voltage_kv, units="kV")
        put(source, "target_material", "W")
    for i, layer in enumerate(line.filters, start=1):
        attenuator = new_group(instrument, f"filter_{i}", "NXattenuator")
        put(attenuator, "type", layer.material)
        put(attenuator, "thickness", layer.thickness_mm, units="mm")
    sample = new_group(entry, "sample", "NXsample")
    put(sample, "role", line.kind)
    if line.emitter:
        put(sample, "name" if nuclide else "chemical_formula", line.emitter)


def _write_detector(instrument: h5py.Group, scan: ThresholdScan) -> None:
    detector = new_group(instrument, "detector", "NXdetector")
    if scan.sensor_material is not None:
        put(detector, "sensor_material", scan.sensor_material)
    if scan.sensor_thickness_mm is not None:
        put(detector, "sensor_thickness", scan.sensor_thickness_mm, units="mm")
    if scan.pixel_size_um is not None:
        put(detector, "y_pixel_size", scan.pixel_size_um[0], units="um")
        put(detector, "x_pixel_size", scan.pixel_size_um[1], units="um")
    put(detector, "count_time", scan.count_time_s, units="s")
    put(detector, "pixel_mask", scan.pixel_mask)
    for k in range(scan.shape[1]):
        name = f"threshold_{k + 1}_channel"
        channel = new_group(detector, name, "NXdetector_channel")
        put(channel, "threshold_setting", scan.settings)
        if scan.nominal_scale is not None:
            put(channel, "nominal_scale", np.array(scan.nominal_scale))
        channel.create_dataset(
            "data",
            data=scan.counts[:, k].astype(np.uint32),
            chunks=(1, *scan.shape[2:]),
            compression="gzip",
            compression_opts=2,
            shuffle=True,
        )


def read_threshold_scan(path: str | Path) -> ThresholdScan:
    """Threshold scan of a NeXus file.

    Raises
    ------
    FileFormatError
        If the file is no HDF5, lacks a field or a unit, or shapes disagree.
    ScanError
        If a value cannot be: an unknown role, negative counts.
    """
    path = Path(path)
    with opened(path) as file:
        entries = Node(str(path), file).children("NXentry")
        scanned = [e for e in entries if e.children("NXinstrument")]
        if not scanned:
            msg = (
                f"{path}: no NXentry holds an instrument, so this is no threshold scan"
            )
            raise FileFormatError(msg)
        entry = scanned[0]
        instrument = entry.child("NXinstrument")
        detector = instrument.child("NXdetector")
        settings, counts, nominal = _channels(path, detector)
        fields = {
            "source": _source(path, entry, instrument),
            "pixel_mask": _mask(detector, counts.shape[2:]),
            "count_time_s": _times(detector, settings.size),
            "title": entry.text("title", default=""),
            "start_time": entry.text("start_time", default=""),
            **_sensor(detector),
        }
        return ThresholdScan(
            settings=settings,
            counts=counts,
            nominal_scale=nominal,
            file=str(path),
            digest=file_digest(path),
            **fields,
        )


def _channels(
    path: Path, detector: Node
) -> tuple[NDArray[np.float64], NDArray[np.uint32], tuple[float, float] | None]:
    """Settings, counts (n, C, y, x) and the rough scale, if the file has one."""
    channels = [
        c for c in detector.children("NXdetector_channel") if c.has("threshold_setting")
    ]
    if not channels:
        msg = (
            f"{path}: {detector.group.name} holds no NXdetector_channel with a "
            "threshold_setting; a threshold scan needs one"
        )
        raise FileFormatError(msg)
    settings = channels[0].values("threshold_setting").astype(np.float64)
    found = []
    for channel in channels:
        data = channel.values("data")
        own = channel.values("threshold_setting").astype(np.float64)
        if data.ndim != 3 or data.shape[:1] != own.shape or data.dtype.kind not in "iu":
            msg = (
                f"{channel.name('data')} has shape {data.shape} and type {data.dtype}; "
                f"{own.size} settings need integers of shape ({own.size}, row, column)"
            )
            raise FileFormatError(msg)
        if (
            not np.array_equal(own, settings)
            or data.shape != channels[0].dataset("data").shape
        ):
            msg = (
                f"{channel.name('threshold_setting')} differs from the first channel's "
                "in settings or pixels; give each such channel a file of its own"
            )
            raise FileFormatError(msg)
        if data.size and data.min() < 0:
            msg = f"{channel.name('data')} holds negative counts"
            raise ScanError(msg)
        found.append(data.astype(np.uint32))
    nominal = None
    if channels[0].has("nominal_scale"):
        pair = channels[0].values("nominal_scale").astype(np.float64).ravel()
        if pair.size != 2 or not np.all(np.isfinite(pair)) or pair[1] == 0.0:
            msg = (
                f"{channels[0].name('nominal_scale')} must be two numbers, keV at "
                "setting 0 and keV per unit (not 0)"
            )
            raise FileFormatError(msg)
        nominal = (float(pair[0]), float(pair[1]))
    return settings, np.stack(found, axis=1), nominal


def _source(path: Path, entry: Node, instrument: Node) -> LineSource:
    """What sent the photons."""
    sample = entry.child("NXsample")
    kind = sample.text("role")
    emitter = sample.text("chemical_formula", default="") or sample.text(
        "name", default=""
    )
    source = instrument.child("NXsource")
    voltage = None
    if source.has("voltage"):
        voltage = source.one_quantity("voltage", "kV")
    filters = tuple(
        Filter(
            material=node.text("type"),
            thickness_mm=node.one_quantity("thickness", "mm"),
        )
        for node in instrument.children("NXattenuator")
    )
    try:
        return LineSource(
            kind=kind, emitter=emitter, voltage_kv=voltage, filters=filters
        )
    except InputError as error:
        msg = f"{path}: /entry/sample: {error}"
        raise ScanError(msg) from error


def _times(detector: Node, n: int) -> NDArray[np.float64]:
    """Count time of each setting; a single one stands for all."""
    time = np.atleast_1d(detector.quantity("count_time", "s"))
    if time.size == 1:
        time = np.full(n, time.ravel()[0])
    if time.shape != (n,):
        msg = (
            f"{detector.name('count_time')} has shape {time.shape}, the settings need "
            f"({n},)"
        )
        raise FileFormatError(msg)
    return time


def _mask(detector: Node, shape: tuple[int, ...]) -> NDArray[np.uint32]:
    """NXdetector's mask; all good where there is none."""
    if not detector.has("pixel_mask"):
        return np.zeros(shape, np.uint32)
    raw = detector.values("pixel_mask")
    if raw.shape != shape or raw.dtype.kind not in "iub":
        msg = (
            f"{detector.name('pixel_mask')} has shape {raw.shape}; the pixels need "
            f"integers of shape {shape}"
        )
        raise FileFormatError(msg)
    return raw.astype(np.uint32)


def _sensor(detector: Node) -> dict[str, Any]:
    """Sensor and pixel size, None where the file does not say."""
    thickness = size = None
    if detector.has("sensor_thickness"):
        thickness = detector.one_quantity("sensor_thickness", "mm")
    if detector.has("x_pixel_size") and detector.has("y_pixel_size"):
        size = (
            detector.one_quantity("y_pixel_size", "um"),
            detector.one_quantity("x_pixel_size", "um"),
        )
    return {
        "sensor_material": detector.text("sensor_material", default="") or None,
        "sensor_thickness_mm": thickness,
        "pixel_size_um": size,
    }
