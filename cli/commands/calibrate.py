"""wedgewright calibrate: per-pixel responses from a wedge scan."""

from __future__ import annotations

from pathlib import Path

import click

from spectral.calibration.calibration_file import write_calibration
from spectral.calibration.calibrator import Faults, WedgeCalibrator
from spectral.calibration.summary import calibration_summary, calibration_text
from spectral.calibration.threshold_scan.energies_file import (
    read_threshold_energies,
)
from spectral.calibration.threshold_scan.result import threshold_prior
from spectral.scans.script import open_scan

from ..outcome import SAFETY, UseError, ends_well, json_option, scan_argument, show
from ..outputs import OutputFile, keep_inputs
from ..stages import stages


@click.command(epilog=SAFETY)
@scan_argument
@click.option(
    "-o",
    "--output",
    type=OutputFile(),
    required=True,
    help="Calibration file to write (HDF5).",
)
@click.option(
    "--without",
    type=int,
    multiple=True,
    metavar="N",
    help="Leave exposure N of the scan out (counted from 0); may be repeated.",
)
@click.option(
    "--faults",
    type=click.Choice(["leave out", "refuse", "keep"]),
    default="leave out",
    show_default=True,
    help="What to do with exposures that contradict the others.",
)
@click.option(
    "--thresholds",
    "energies_path",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    help="Threshold energies of each pixel, from 'wedgewright thresholds'.",
)
@click.option(
    "--setting",
    "settings",
    type=float,
    multiple=True,
    metavar="S",
    help="With --thresholds: the scan's threshold settings, lowest first; repeat.",
)
@json_option
@ends_well
def calibrate(
    scan_path: Path,
    output: Path,
    without: tuple[int, ...],
    faults: Faults,
    energies_path: Path | None,
    settings: tuple[float, ...],
    as_json: bool,
) -> None:
    """Learn every pixel's bin response from the wedge scan SCAN.

    The scan needs open exposures and wedge steps; dark exposures and opens at several
    tube currents make it better. What was learned, how well, and everything that
    decomposing needs goes into one file.
    """
    keep_inputs([output], scan_path, energies_path)
    if settings and energies_path is None:
        message = "--setting goes with --thresholds; name the file of energies too"
        raise UseError(message)
    scan = open_scan(scan_path)
    known = None
    if energies_path is not None:
        if len(settings) != scan.shape[1]:
            message = (
                f"--thresholds needs one --setting for each of the {scan.shape[1]} "
                f"thresholds, got {len(settings)}"
            )
            raise UseError(message)
        known = threshold_prior(read_threshold_energies(energies_path), settings)
    with stages() as tell:
        fitted = WedgeCalibrator(
            excluded=without, faults=faults, threshold_shifts=known
        ).fit(scan, progress=tell)
    calibration = fitted.calibration_
    write_calibration(calibration, output)
    show(
        calibration_summary(calibration), calibration_text(calibration), as_json=as_json
    )
