"""The demonstration: scan, check, calibrate, decompose, report, compare with truth."""

from __future__ import annotations

from dataclasses import dataclass
from tempfile import TemporaryFile
from time import perf_counter
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.calibrator import WedgeCalibrator
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.demo.region_mean import region_mean
from spectral.demo.scenario import (
    PROFILE_ROW,
    REGIONS,
    WEDGE_TITLE,
    Scenario,
    build_scenario,
)
from spectral.errors import InputError, ScanError
from spectral.reporting.report import write_report
from spectral.scans.maps_file import write_maps
from spectral.scans.scan_check import check_scan
from spectral.scans.scan_file import read_scan
from spectral.scans.scan_writing import write_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.calibration.result import Calibration
    from spectral.scans.maps import Maps


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionResult:
    """One region of the part: truth, found and error, in g/cm2, for one material.

    ``error`` is the standard error of the region's mean, calibration included.
    """

    region: str
    material: str
    truth: float
    found: float
    error: float
    single_error: float
    flagged: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DemoOutcome:
    """What the demonstration made and found.

    Attributes
    ----------
    files : dict of str to Path
        "wedge", "part", "calibration", "maps" and the pages.
    regions : tuple of RegionResult
    verdict : str
        First line of the scan's check.
    exceptions : tuple of str
        What that line speaks of.
    threshold_error_kev : float
        Median absolute error of the learned thresholds over the good pixels.
    error_ratio : float
        Scatter between repeats over the reported standard error.
    bad_found, bad_true : int
    seconds : dict of str to float
        Time of each stage.
    """

    files: dict[str, Path]
    regions: tuple[RegionResult, ...]
    verdict: str
    exceptions: tuple[str, ...]
    threshold_error_kev: float
    error_ratio: float
    bad_found: int
    bad_true: int
    seconds: dict[str, float]


def run_demo(
    folder: Path, *, progress: Callable[[str, float], None] | None = None
) -> DemoOutcome:
    """Run the main job on the built-in scenario.

    Parameters
    ----------
    folder : Path
        Made if it does not exist; files of an earlier run are replaced.
    progress : callable, optional
        Called with the stage and its finished share.
    """

    def tell(stage: str) -> Callable[[float], None]:
        return lambda share: progress(stage, share) if progress is not None else None

    names = {
        "wedge": "wedge.h5",
        "part": "part.h5",
        "calibration": "calibration.h5",
        "maps": "maps.h5",
        "page of the wedge scan": "wedge.html",
        "page of the calibration": "calibration.html",
        "page of the maps": "maps.html",
    }
    files = {what: folder / name for what, name in names.items()}
    _claim(folder, files)
    seconds: dict[str, float] = {}
    clock = perf_counter()

    def lap(stage: str) -> None:
        nonlocal clock
        seconds[stage] = perf_counter() - clock
        clock = perf_counter()

    scenario = build_scenario(progress=tell("simulate"))
    write_scan(scenario.wedge, files["wedge"])
    write_scan(scenario.part, files["part"])
    lap("simulate")
    wedge, part = read_scan(files["wedge"]), read_scan(files["part"])
    check = check_scan(wedge)
    lap("check")
    made = WedgeCalibrator().fit(wedge, progress=progress).calibration_
    write_calibration(made, files["calibration"])
    calibration = read_calibration(files["calibration"])
    lap("calibrate")
    maps = MaterialDecomposer(calibration).decompose(part, progress=tell("decompose"))
    write_maps(maps, files["maps"])
    lap("decompose")
    for source in ("wedge", "calibration", "maps"):
        page = next(k for k in files if k.startswith("page") and source in k)
        row = PROFILE_ROW if source == "maps" else None
        write_report(files[source], files[page], row=row)
    lap("report")
    return DemoOutcome(
        files=files,
        regions=_regions(scenario, maps),
        verdict=check.verdict.value,
        exceptions=check.exceptions,
        threshold_error_kev=_threshold_error(scenario, calibration),
        error_ratio=_error_ratio(maps),
        bad_found=int((scenario.bad & ~calibration.good).sum()),
        bad_true=int(scenario.bad.sum()),
        seconds=seconds,
    )


def _claim(folder: Path, files: dict[str, Path]) -> None:
    """Make the folder; refuse one that takes no files, or holds others' by the names.

    Raises
    ------
    InputError
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with TemporaryFile(dir=folder):
            pass
    except OSError as error:
        msg = (
            f"{folder}: the folder takes no files ({error.strerror or error}); name "
            "another"
        )
        raise InputError(msg) from error
    taken = [path.name for path in files.values() if path.exists()]
    if taken and not _made_here(files["wedge"]):
        msg = (
            f"{folder} holds {taken[0]}, which the demonstration did not make and would "
            "replace; name another folder"
        )
        raise InputError(msg)


def _made_here(wedge: Path) -> bool:
    try:
        return read_scan(wedge).title == WEDGE_TITLE
    except ScanError:
        return False


def _regions(scenario: Scenario, maps: Maps) -> tuple[RegionResult, ...]:
    """Truth and mean of each region; that of the pins is no mixture of the basis."""
    results = []
    for index, name in enumerate(REGIONS):
        inside = (scenario.region == index) & ~scenario.bad
        for m, material in enumerate(maps.material):
            found = region_mean(maps, inside, m)
            if found is None:
                continue
            results.append(
                RegionResult(
                    region=name,
                    material=material,
                    truth=float(scenario.areal_density[m][inside].mean()),
                    found=found.value,
                    error=found.error,
                    single_error=found.single_error,
                    flagged=found.flagged,
                )
            )
    return tuple(results)


def _threshold_error(scenario: Scenario, calibration: Calibration) -> float:
    """Median absolute error of thresholds, after their common shift, in keV."""
    good = calibration.good & ~scenario.bad
    departure = calibration.threshold_kev()[:, good] - scenario.threshold_kev[:, good]
    centred = departure - np.median(departure, axis=1, keepdims=True)
    return float(np.median(np.abs(centred)))


def _error_ratio(maps: Maps) -> float:
    """Root mean square scatter of repeats over root mean square reported error."""
    value = np.where(maps.flags[:, None] == 0, maps.areal_density, np.nan)
    full = np.asarray(np.isfinite(value).all(axis=(0, 1)))
    scatter = value[:, :, full].var(axis=0, ddof=1)
    reported = maps.areal_density_errors[:, :, full] ** 2
    return float(np.sqrt((scatter / reported.mean(axis=0)).mean()))
