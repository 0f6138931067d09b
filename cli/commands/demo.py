"""wedgewright demo: the main job on a built-in scenario."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from spectral.demo.run import run_demo

from ..outcome import SAFETY, ends_well, json_option, show
from ..stages import stages

if TYPE_CHECKING:
    from spectral.demo.run import DemoOutcome


@click.command(epilog=SAFETY)
@click.argument(
    "folder",
    metavar="[DIR]",
    default="wedgewright-demo",
    type=click.Path(file_okay=False, path_type=Path),
)
@json_option
@ends_well
def demo(folder: Path, as_json: bool) -> None:
    """Run scan, check, calibration, decomposition and report on an invented part.

    A virtual detector counts event by event behind an invented connector housing; the
    results are compared with the known truth. Files go to DIR (wedgewright-demo).
    """
    with stages() as tell:
        outcome = run_demo(folder, progress=tell)
    show(_summary(outcome), _text(outcome), as_json=as_json)


def _summary(outcome: DemoOutcome) -> dict[str, Any]:
    found = asdict(outcome)
    found["files"] = {what: str(path) for what, path in outcome.files.items()}
    return found


def _text(outcome: DemoOutcome) -> str:
    lines = [
        "An invented connector housing: nylon with an aluminium insert and steel pins.",
        f"check: {outcome.verdict}",
        *(f"  - {text}" for text in outcome.exceptions),
        f"bad pixels: {outcome.bad_found} of {outcome.bad_true} found",
        f"thresholds: median error {outcome.threshold_error_kev:.2f} keV per pixel",
        f"scatter between repeats over reported error, 1 if true: {outcome.error_ratio:.3f}",
        "",
        f"{'region':18s}{'material':10s}{'truth':>8s}{'found':>9s}{'+-':>8s}{'':2s}"
        + f"{'one pixel +-':>12s}{'flagged':>9s}   (g/cm2)",
    ]
    lines.extend(
        f"{r.region:18s}{r.material:10s}{r.truth:8.3f}{r.found:9.3f}{r.error:8.3f}"
        f"{r.single_error:14.3f}{100 * r.flagged:7.1f} %"
        for r in outcome.regions
    )
    total = sum(outcome.seconds.values())
    spent = ", ".join(f"{k} {v:.0f} s" for k, v in outcome.seconds.items())
    lines += [
        "",
        "The pins are no mixture of nylon and aluminium: their numbers are equivalents.",
        f"{total:.0f} s ({spent})",
        *(f"{what}: {path}" for what, path in outcome.files.items()),
    ]
    return "\n".join(lines)
