"""wedgewright check: is this scan fit for use, and what is wrong with it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from spectral.forward.step_thickness import wedge_faults
from spectral.scans.scan_check import Verdict, check_scan
from spectral.scans.scan_check_text import check_summary, check_text
from spectral.scans.script import open_scan

from ..outcome import (
    SAFETY,
    DataError,
    ends_well,
    json_option,
    progress,
    scan_argument,
    show,
)

if TYPE_CHECKING:
    from pathlib import Path


@click.command(epilog=SAFETY)
@scan_argument
@json_option
@ends_well
def check(scan_path: Path, as_json: bool) -> None:
    """Say whether SCAN is fit for use, and what is wrong with it.

    Looks at dark counts, counting loss, scatter across repeats, drift, bad pixels with
    their reasons, and exposures that contradict what the scan says of them. Fit means
    that a calibration or a decomposition can start from these data. Ends with 1 if
    they are not fit.
    """
    scan = open_scan(scan_path)
    known = wedge_faults(scan) if "wedge" in scan.role else ()
    with progress("exposures") as tell:
        result = check_scan(scan, known=known, progress=tell)
    show(check_summary(result), check_text(result), as_json=as_json)
    if result.verdict is Verdict.NOT_FIT:
        message = f"{result.source} is not fit for use: {result.causes[0]}"
        raise DataError(message)
