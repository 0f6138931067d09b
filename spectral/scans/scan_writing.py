"""A scan written as one NeXus file."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.nexus import new_group, put, written_whole

if TYPE_CHECKING:
    import h5py

    from spectral.scans.scan import Scan


def write_scan(scan: Scan, path: str | Path) -> None:
    """Write a scan as one NeXus file, which appears only when it is complete.

    Parameters
    ----------
    scan : Scan
        Its counts are read and written one exposure at a time.
    path : str or Path
    """
    with written_whole(Path(path)) as file:
        file.attrs["default"] = "entry"
        entry = new_group(file, "entry", "NXentry")
        put(entry, "title", scan.title)
        if scan.start_time:
            put(entry, "start_time", scan.start_time)
        instrument = new_group(entry, "instrument", "NXinstrument")
        _write_beam(instrument, scan)
        _write_detector(instrument, scan)
        _write_sample(entry, scan)
        _write_plot(entry)


def _write_beam(instrument: h5py.Group, scan: Scan) -> None:
    source = new_group(instrument, "source", "NXsource")
    put(source, "probe", "x-ray")
    put(source, "type", "Fixed Tube X-ray")
    put(source, "target_material", scan.target_material)
    put(source, "voltage", scan.voltage_kv, units="kV")
    if scan.current_ma is not None:
        put(source, "current", scan.current_ma, units="mA")
    for i, layer in enumerate(scan.filters, start=1):
        attenuator = new_group(instrument, f"filter_{i}", "NXattenuator")
        put(attenuator, "type", layer.material)
        put(attenuator, "thickness", layer.thickness_mm, units="mm")


def _write_detector(instrument: h5py.Group, scan: Scan) -> None:
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
    n, _, y, x = scan.shape
    stored = np.uint16 if scan.count_limit == np.iinfo(np.uint16).max else np.uint32
    channels = []
    for k, energy in enumerate(scan.thresholds_kev.tolist(), start=1):
        channel = new_group(detector, f"threshold_{k}_channel", "NXdetector_channel")
        put(channel, "threshold_energy", energy, units="keV")
        data = channel.create_dataset(
            "data",
            (n, y, x),
            stored,
            chunks=(1, y, x),
            compression="gzip",
            compression_opts=2,
            shuffle=True,
        )
        channels.append(data)
    for i in range(n):
        image = scan.counts.read([i])[0]
        for data, counts in zip(channels, image, strict=True):
            data[i] = counts


def _write_sample(entry: h5py.Group, scan: Scan) -> None:
    sample = new_group(entry, "sample", "NXsample")
    put(sample, "role", scan.role)
    put(sample, "material", tuple(m.name for m in scan.materials))
    put(sample, "formula", tuple(m.formula for m in scan.materials))
    density = np.array([m.density_g_cm3 for m in scan.materials], np.float64)
    put(sample, "density", density, units="g/cm3")
    put(sample, "thickness", scan.thickness_mm, units="mm")
    if scan.rotation_angle_deg is not None:
        put(sample, "rotation_angle", scan.rotation_angle_deg, units="deg")


def _write_plot(entry: h5py.Group) -> None:
    """Let a viewer open the counts above the lowest threshold."""
    entry.attrs["default"] = "counts"
    plot = new_group(entry, "counts", "NXdata")
    plot.attrs["signal"] = "lowest_threshold"
    target = entry["instrument/detector/threshold_1_channel/data"]
    plot["lowest_threshold"] = target
