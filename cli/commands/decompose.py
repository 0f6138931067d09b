"""wedgewright decompose: areal-density maps of a scan's object exposures."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from spectral.calibration.calibration_file import read_calibration
from spectral.decomposition.cluster import on_cluster
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.object_scan import chosen_exposures
from spectral.decomposition.series import decompose_series
from spectral.decomposition.summary import maps_summary, maps_text
from spectral.scans.maps_file import read_maps
from spectral.scans.script import open_scan

from ..outcome import (
    SAFETY,
    ends_well,
    goes_on,
    json_option,
    say,
    scan_argument,
    show,
)
from ..outputs import OutputFile, keep_inputs
from ..stages import stages

SHOWN = 32
"""Exposures from which the printed summary is made, spread over the series."""


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
    help="Maps file to write (NeXus).",
)
@click.option(
    "--exposure",
    "exposures",
    type=int,
    multiple=True,
    metavar="N",
    help="Decompose exposure N (counted from 0) instead of all objects; repeatable.",
)
@click.option(
    "--keep-bias",
    is_flag=True,
    help="Leave the first-order bias of maximum likelihood in.",
)
@click.option(
    "--nonnegative",
    is_flag=True,
    help="Keep areal densities at or above 0; averages are then biased.",
)
@click.option(
    "--keep-pixels",
    is_flag=True,
    help="Do not let SCAN's open exposures sharpen the pixels' responses.",
)
@click.option(
    "--scheduler",
    metavar="ADDRESS",
    help="Work on a running Dask cluster (tcp://host:port).",
)
@click.option(
    "--threads", type=click.IntRange(min=1), default=2, show_default=True,
    help="Threads of the solver.",
)  # fmt: skip
@json_option
@ends_well
def decompose(
    calibration_path: Path,
    scan_path: Path,
    output: Path,
    exposures: tuple[int, ...],
    keep_bias: bool,
    nonnegative: bool,
    keep_pixels: bool,
    threads: int,
    scheduler: str | None,
    as_json: bool,
) -> None:
    """Turn the counts of SCAN into maps of g/cm2 with errors and flags.

    CALIBRATION must come from a wedge scan of the same detector at the same voltage,
    filters and thresholds. Open exposures in SCAN set the tube's output. An
    interrupted run goes on when the same command is given again.
    """
    keep_inputs([output], calibration_path, scan_path)
    calibration = read_calibration(calibration_path)
    scan = open_scan(scan_path)
    options = {
        "bias_correction": not keep_bias,
        "nonnegative": nonnegative,
        "follow_pixels": not keep_pixels,
    }
    decomposer = MaterialDecomposer(calibration, threads=threads, **options)
    compute = None
    if scheduler is not None:
        compute = on_cluster(
            scheduler,
            calibration_path,
            scan_path,
            options,
            digests=(calibration.digest, scan.digest),
        )
    total = chosen_exposures(scan, exposures or None).size
    with goes_on(output), stages(decompose=(total, "exposures")) as tell:
        tell("prepare", 0.0)
        run = decompose_series(
            decomposer,
            scan,
            output,
            exposures=exposures or None,
            compute=compute,
            progress=lambda share: tell("decompose", share),
            gathering=lambda share: tell("write", share),
        )
    if run.resumed:
        say(f"went on from {run.resumed} of {run.blocks} blocks of an earlier run")
    shown = np.unique(np.linspace(0, run.exposures - 1, SHOWN).astype(int))
    maps = read_maps(output, which=shown.tolist())
    show(
        maps_summary(maps, exposures=run.exposures),
        maps_text(maps, exposures=run.exposures),
        as_json=as_json,
    )
