"""wedgewright compare: what changed between two calibrations."""

from __future__ import annotations

from pathlib import Path

import click

from spectral.calibration.calibration_file import read_calibration
from spectral.calibration.comparison import compare as compare_calibrations
from spectral.calibration.comparison_summary import comparison_summary, comparison_text
from spectral.reporting.comparison_page import write_comparison

from ..outcome import SAFETY, ends_well, json_option, show
from ..outputs import OutputFile, keep_inputs

_EXISTING = click.Path(exists=True, dir_okay=False, path_type=Path)


@click.command(epilog=SAFETY)
@click.argument("old_path", metavar="OLD", type=_EXISTING)
@click.argument("new_path", metavar="NEW", type=_EXISTING)
@click.option(
    "-o",
    "--output",
    type=OutputFile(),
    help="Also write a page with pictures (HTML, all in one file).",
)
@json_option
@ends_well
def compare(old_path: Path, new_path: Path, output: Path | None, as_json: bool) -> None:
    """Say what changed from the calibration OLD to the calibration NEW.

    Thresholds in keV, areas, flux and dead time in percent, pixels gone bad or
    recovered; each change beside the one that errors alone explain.
    """
    keep_inputs([output], old_path, new_path)
    old, new = read_calibration(old_path), read_calibration(new_path)
    names = str(old_path), str(new_path)
    found = compare_calibrations(old, new, names=names)
    summary, text = comparison_summary(found), comparison_text(found)
    if output is not None:
        write_comparison(old, new, output, names=names, comparison=found)
        summary["page"] = str(output)
        text = f"{text}\npage: {output}"
    show(summary, text, as_json=as_json)
