"""wedgewright report: pictures and tables for a scan, a calibration or maps."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from spectral.errors import InputError
from spectral.reporting.report import write_report

from ..outcome import SAFETY, ends_well, json_option, show
from ..outputs import OutputFile, keep_inputs

if TYPE_CHECKING:
    from spectral.reporting.page import Page


@click.command(epilog=SAFETY)
@click.argument(
    "path",
    metavar="FILE",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
)
@click.option(
    "-o",
    "--output",
    type=OutputFile(),
    default="report.html",
    show_default=True,
    help="Page to write (HTML, all in one file).",
)
@click.option(
    "--exposure",
    type=int,
    metavar="N",
    help="Of maps: show exposure N of the scan instead of the mean of all.",
)
@click.option(
    "--row",
    type=int,
    metavar="N",
    help="Of maps: row of the profile, counted from 0; the middle one by default.",
)
@json_option
@ends_well
def report(
    path: Path, output: Path, exposure: int | None, row: int | None, as_json: bool
) -> None:
    """Write pictures and tables about FILE as one page that needs no network.

    FILE is a scan (NeXus file or scan script), a calibration or maps; the command
    finds out which. The page opens with the answer in words and numbers, and ends with
    what was assumed.
    """
    keep_inputs([output], path)
    try:
        page = write_report(path, output, exposure=exposure, row=row)
    except InputError as error:
        said = str(error)
        raise InputError(said if str(path) in said else f"{path}: {said}") from error
    show(_summary(page, output), _text(page, output), as_json=as_json)


def _summary(page: Page, output: Path) -> dict[str, Any]:
    return {
        "page": str(output),
        "kind": page.kind,
        "title": page.title,
        "said": list(page.said),
        "look": list(page.look),
        "figures": {
            figure.name: figure.value
            if figure.value is not None and math.isfinite(figure.value)
            else None
            for figure in page.figures
        },
    }


def _text(page: Page, output: Path) -> str:
    lines = [f"{page.kind}: {page.title}", *(f"  {text}" for text in page.said)]
    lines += [f"  ! {text}" for text in page.look]
    return "\n".join([*lines, f"page: {output}"])
