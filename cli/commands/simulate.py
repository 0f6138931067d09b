"""wedgewright simulate: the scan that a script describes, from a virtual detector."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
import numpy as np

from spectral.scans.scan_writing import write_scan
from spectral.scans.truth_file import write_truth
from spectral.virtual.script_scan import simulate_script

from ..outcome import SAFETY, ends_well, json_option, show
from ..outputs import OutputFile, keep_inputs
from ..stages import stages

if TYPE_CHECKING:
    from spectral.virtual.script_scan import SimulatedScript


@click.command(epilog=SAFETY)
@click.argument(
    "script",
    metavar="SCRIPT",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
)
@click.option(
    "-o",
    "--output",
    type=OutputFile(),
    required=True,
    help="Scan file to write (NeXus).",
)
@click.option(
    "--truth",
    "truth_path",
    type=OutputFile(),
    help="Also write what is true of pixels, tube and object (HDF5).",
)
@click.option(
    "--pixels",
    type=click.IntRange(min=1),
    nargs=2,
    metavar="ROWS COLUMNS",
    help="Simulate so many pixels instead, the object drawn smaller: for a quick look.",
)
@click.option(
    "--threads", type=click.IntRange(min=1), default=2, show_default=True,
    help="Threads of the simulation; the counts do not depend on it.",
)  # fmt: skip
@json_option
@ends_well
def simulate(
    script: Path,
    output: Path,
    truth_path: Path | None,
    pixels: tuple[int, int] | None,
    threads: int,
    as_json: bool,
) -> None:
    """Count, event by event, the scan that SCRIPT describes, and write it.

    SCRIPT is a scan script (TOML) whose [virtual] table names a detector description,
    the photons per mA s and the seed; it may plant faults and draw an object. The scan
    says no more than a measured one would. Same seed, same file.
    """
    keep_inputs([output, truth_path], script)
    with stages() as tell:
        made = simulate_script(
            script,
            pixels=pixels,
            threads=threads,
            progress=lambda share: tell("simulate", share),
        )
        tell("write", 0.0)
        write_scan(made.scan, output)
        if truth_path is not None:
            write_truth(made.truth, truth_path)
    summary = _summary(made, output, truth_path)
    show(summary, _text(summary), as_json=as_json)


def _summary(
    made: SimulatedScript, output: Path, truth_path: Path | None
) -> dict[str, Any]:
    scan, truth = made.scan, made.truth
    exposures, thresholds, rows, columns = scan.shape
    opens = scan.counts.read(scan.exposures("open")).mean(axis=(2, 3))
    return {
        "scan": str(output),
        "truth": None if truth_path is None else str(truth_path),
        "title": scan.title,
        "detector": made.detector.name,
        "exposures": exposures,
        "thresholds": thresholds,
        "rows": rows,
        "columns": columns,
        "roles": {role: scan.role.count(role) for role in dict.fromkeys(scan.role)},
        "open_counts": opens[opens[:, 0].argmax()].tolist() if opens.size else None,
        "bad_pixels": int(np.count_nonzero(truth.kind)),
        "seed": truth.seed,
        "detector_seed": truth.detector_seed,
    }


def _text(summary: dict[str, Any]) -> str:
    roles = ", ".join(f"{n} {role}" for role, n in summary["roles"].items())
    size = f"{summary['rows']} x {summary['columns']}"
    lines = [
        f"{summary['title'] or 'scan'}, simulated on {summary['detector']}",
        f"exposures: {summary['exposures']} ({roles})",
        f"pixels: {size}, {summary['bad_pixels']} of them bad",
        f"thresholds: {summary['thresholds']}",
    ]
    if summary["open_counts"] is not None:
        means = ", ".join(f"{n:.0f}" for n in summary["open_counts"])
        lines.append(f"mean counts of the brightest open exposure: {means}")
    lines.append(f"scan: {summary['scan']}")
    if summary["truth"] is not None:
        lines.append(f"truth: {summary['truth']}")
    return "\n".join(lines)
