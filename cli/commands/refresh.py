"""wedgewright refresh: a calibration brought up to date by a short scan."""

from __future__ import annotations

from pathlib import Path

import click

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.refresh import refresh as refresh_calibration
from spectral.calibration.refresh_summary import refresh_summary, refresh_text
from spectral.scans.script import open_scan

from ..outcome import SAFETY, ends_well, json_option, scan_argument, show
from ..outputs import OutputFile, keep_inputs


@click.command(epilog=SAFETY)
@click.argument(
    "calibration_path",
    metavar="CALIBRATION",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
)
@scan_argument
@click.option(
    "-o",
    "--output",
    type=OutputFile(),
    required=True,
    help="Calibration file to write (HDF5).",
)
@json_option
@ends_well
def refresh(
    calibration_path: Path, scan_path: Path, output: Path, as_json: bool
) -> None:
    """Bring CALIBRATION up to date with the short scan SCAN.

    SCAN holds open exposures and two or three wedge steps at the calibration's own
    setting. What moved is said, and whether a full wedge scan is needed; the new
    calibration names the old one and the scan.
    """
    keep_inputs([output], calibration_path, scan_path)
    old = read_calibration(calibration_path)
    done = refresh_calibration(old, open_scan(scan_path))
    write_calibration(done.calibration, output)
    show(refresh_summary(done), refresh_text(done), as_json=as_json)
