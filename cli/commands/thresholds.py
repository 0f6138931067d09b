"""wedgewright thresholds: keV of every pixel's threshold settings."""

from __future__ import annotations

from pathlib import Path

import click

from spectral.calibration.threshold_scan.calibrate import threshold_energies
from spectral.calibration.threshold_scan.energies_file import write_threshold_energies
from spectral.calibration.threshold_scan.summary import (
    threshold_summary,
    threshold_text,
)
from spectral.scans.threshold_scan_file import read_threshold_scan

from ..outcome import SAFETY, ends_well, json_option, show
from ..outputs import OutputFile, keep_inputs
from ..stages import stages


@click.command(epilog=SAFETY)
@click.argument(
    "scan_paths",
    metavar="SCAN...",
    nargs=-1,
    required=True,
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
)
@click.option(
    "-o",
    "--output",
    type=OutputFile(),
    required=True,
    help="File of threshold energies to write (HDF5).",
)
@click.option(
    "--setting",
    "settings",
    type=float,
    multiple=True,
    metavar="S",
    help="Also say the energy at this setting; may be repeated.",
)
@json_option
@ends_well
def thresholds(
    scan_paths: tuple[Path, ...],
    output: Path,
    settings: tuple[float, ...],
    as_json: bool,
) -> None:
    """Turn threshold settings into keV, pixel by pixel.

    Each SCAN holds counts against the setting of a threshold for one source of known
    energy: a fluorescence target, Am-241, a K-edge filter in a tube's beam, or the end
    of a tube's spectrum. Two known energies are needed, three show whether the scale
    is straight.
    """
    keep_inputs([output], *scan_paths)
    scans = [read_threshold_scan(path) for path in scan_paths]
    with stages() as tell:
        energies = threshold_energies(
            scans, progress=lambda share: tell("known energies", share)
        )
    summary = threshold_summary(energies, settings)
    text = threshold_text(energies, settings)
    write_threshold_energies(energies, output)
    show(summary, text, as_json=as_json)
