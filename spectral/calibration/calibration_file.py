"""A calibration written to, and read from, one HDF5 file of the project's own.

The layout may change with ``FORMAT_VERSION``; a reader refuses what it does not know.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.calibration.calibration_shapes import part_at_fault
from spectral.calibration.residual import ResidualCorrection
from spectral.calibration.result import Calibration, Promise, StepTable
from spectral.errors import FileFormatError
from spectral.forward.counting_model import CountingModel
from spectral.physics.pileup import PulseShape
from spectral.scans.nexus import opened, plain, written_whole
from spectral.scans.scan import Layer
from spectral.scans.scan_file import file_digest

if TYPE_CHECKING:
    import h5py
    from numpy.typing import NDArray

FORMAT_NAME = "wedgewright calibration"
FORMAT_VERSION = 2

UNITS = {
    "thresholds_kev": "keV",
    "levels_kev": "keV",
    "energy_kev": "keV",
    "attenuation": "cm2/g",
    "areal_density": "g/cm2",
    "largest": "g/cm2",
    "decay": "cm2/g",
    "current_ma": "mA",
    "count_time_s": "s",
    "bias": "g/cm2",
    "single_error": "g/cm2",
}
TEXTS = ("sensor", "scan_source", "scan_digest", "created", "version", "cross_sections")
LISTS = ("filters", "assumptions", "findings")
MAPS = (
    "thresholds_kev",
    "levels_kev",
    "departures",
    "departure_covariance",
    "spread",
    "pixel_reasons",
    "deviance",
)
MODEL = ("energy_kev", "spectrum", "attenuation", "heights")
RESIDUAL = ("largest", "powers", "coefficient", "covariance", "decay", "drift")
RESIDUAL_NUMBERS = ("reference_current_ma", "size", "drift_spread", "degree")
STEPS = (
    "exposure",
    "areal_density",
    "current_ma",
    "count_time_s",
    "drift",
    "residual",
    "physics_residual",
    "error",
)
PROMISE = ("exposure", "bias", "single_error", "fixed_pattern")


def write_calibration(calibration: Calibration, path: str | Path) -> None:
    """Write a calibration; the file appears only when it is complete.

    Parameters
    ----------
    calibration : Calibration
    path : str or Path
    """
    with written_whole(Path(path)) as file:
        file.attrs["format"] = FORMAT_NAME
        file.attrs["format_version"] = FORMAT_VERSION
        for name in TEXTS:
            file.attrs[name] = getattr(calibration, name)
        for name in LISTS:
            file.attrs[name] = json.dumps(getattr(calibration, name))
        for name in ("unknowns", "unknown_errors"):
            file.attrs[name] = json.dumps(getattr(calibration, name))
        file.attrs["voltage_kv"] = calibration.voltage_kv
        file.attrs["photons_per_mas"] = calibration.photons_per_mas
        file.attrs["parameter_names"] = json.dumps(calibration.parameter_names)
        file.attrs["materials"] = json.dumps(
            [[m.name, m.formula, m.density_g_cm3] for m in calibration.materials]
        )
        _put(file, calibration, MAPS)
        _put_model(file.create_group("model"), calibration.model)
        residual = file.create_group("residual")
        _put(residual, calibration.residual, RESIDUAL)
        for name in RESIDUAL_NUMBERS:
            residual.attrs[name] = getattr(calibration.residual, name)
        _put(file.create_group("steps"), calibration.steps, STEPS)
        if calibration.promise is not None:
            _put(file.create_group("promise"), calibration.promise, PROMISE)


def _put(group: h5py.Group, source: object, names: tuple[str, ...]) -> None:
    for name in names:
        value = np.asarray(getattr(source, name))
        packed = value.size > 4096
        dataset = group.create_dataset(
            name, data=value, compression="gzip" if packed else None, shuffle=packed
        )
        if name in UNITS:
            dataset.attrs["units"] = UNITS[name]


def _put_model(group: h5py.Group, model: CountingModel) -> None:
    _put(group, model, MODEL)
    group.attrs["step_kev"] = model.step_kev
    group.attrs["noise_kev"] = model.noise_kev
    for name in ("dead_time_ns", "tail_ns", "tail_height"):
        group.attrs[name] = getattr(model.shape, name)


def read_calibration(path: str | Path) -> Calibration:
    """The calibration of a file.

    Raises
    ------
    FileFormatError
        If the file is no calibration, of a version not known here, or lacks a part.
    """
    path = Path(path)
    with opened(path) as file:
        if plain(file.attrs.get("format", "")) != FORMAT_NAME:
            msg = (
                f"{path}: this is not a calibration file; make one with "
                "'wedgewright calibrate'"
            )
            raise FileFormatError(msg)
        version = plain(file.attrs.get("format_version", 0))
        if version != str(FORMAT_VERSION):
            msg = (
                f"{path}: calibration format {version} is not known to this version "
                f"(it reads {FORMAT_VERSION}); calibrate again or update the package"
            )
            raise FileFormatError(msg)
        try:
            found = _read(file)
        except KeyError as error:
            msg = f"{path}: the calibration lacks a part ({error}); calibrate again"
            raise FileFormatError(msg) from error
        except (OSError, ValueError, TypeError) as error:
            msg = (
                f"{path}: the calibration is damaged ({error}); copy it again from "
                "where it was made, or calibrate again"
            )
            raise FileFormatError(msg) from error
    fault = part_at_fault(found)
    if fault:
        msg = (
            f"{path}: the calibration is damaged: {fault}; copy it again from where it "
            "was made, or calibrate again"
        )
        raise FileFormatError(msg)
    return replace(found, digest=file_digest(path))


def _read(file: h5py.File) -> Calibration:
    texts: dict[str, Any] = {name: plain(file.attrs[name]) for name in TEXTS}
    lists: dict[str, Any] = {
        name: tuple(json.loads(file.attrs[name])) for name in LISTS
    }
    promise = Promise(**_get(file["promise"], PROMISE)) if "promise" in file else None
    return Calibration(
        materials=tuple(
            Layer(name=name, formula=formula, density_g_cm3=float(density))
            for name, formula, density in json.loads(file.attrs["materials"])
        ),
        model=_model(file["model"]),
        photons_per_mas=float(file.attrs["photons_per_mas"]),
        residual=_residual(file["residual"]),
        steps=StepTable(**_get(file["steps"], STEPS)),
        promise=promise,
        unknowns=json.loads(file.attrs["unknowns"]),
        unknown_errors=json.loads(file.attrs["unknown_errors"]),
        voltage_kv=float(file.attrs["voltage_kv"]),
        **_get(file, MAPS),
        **texts,
        **lists,
    )


def _get(group: h5py.Group, names: tuple[str, ...]) -> dict[str, Any]:
    return {name: group[name][()] for name in names}


def _model(group: h5py.Group) -> CountingModel:
    arrays: dict[str, NDArray[np.float64]] = _get(group, MODEL)
    return CountingModel(
        **arrays,
        step_kev=float(group.attrs["step_kev"]),
        noise_kev=float(group.attrs["noise_kev"]),
        shape=PulseShape(
            dead_time_ns=float(group.attrs["dead_time_ns"]),
            tail_ns=float(group.attrs["tail_ns"]),
            tail_height=float(group.attrs["tail_height"]),
        ),
    )


def _residual(group: h5py.Group) -> ResidualCorrection:
    return ResidualCorrection(
        **_get(group, RESIDUAL),
        reference_current_ma=float(group.attrs["reference_current_ma"]),
        size=float(group.attrs["size"]),
        drift_spread=float(group.attrs["drift_spread"]),
        degree=int(group.attrs["degree"]),
    )
