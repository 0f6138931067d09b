"""The figures of calibration and maps on detectors of three sensors, and on odd ones.

Each detector description of ``calibrations/`` is exposed event by event to a wedge and
to an object of nine regions inside the wedge's domain, calibrated and decomposed. CdTe
comes again with pixels whose thresholds differ twice as much, and with few counts.

    python -m tests.benchmarks.other_detectors [CASE ...] [--pixels 32]

CASE is part of a case's name; all by default, some minutes.
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import dataclass, replace
from functools import cache
from time import perf_counter
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.decomposition.decomposer import MaterialDecomposer
from tests.benchmarks.nine_regions import bound, expose, rms, score
from tests.benchmarks.witness_table import BENCHES, SEED, Instrument

if TYPE_CHECKING:
    from spectral.calibration.result import Calibration
    from tests.benchmarks.nine_regions import MaterialScore

LOSS = 0.02
"""Open rate times dead time."""
DRIFT_STEP, HEEL = 5e-4, 0.03
TITLES = (
    "case", "material", "bias / sd: rms, worst", "repeat sd / error",
    "RMSE / bound: median, worst", "fixed pattern / sd", "promised",
    "by the maps' calibration errors", "flagged", "seconds",
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One detector and the way it is used.

    Attributes
    ----------
    name : str
    detector : str
        Which of `BENCHES`.
    spread : float
        Times the description's spread of thresholds between pixels.
    times : float
        Count time of an object exposure over that of a wedge step.
    loss : float
        Open rate times dead time.
    """

    name: str
    detector: str
    spread: float = 1.0
    times: float = 1.0
    loss: float = LOSS


CASES = (
    Case(name="silicon", detector="silicon"),
    Case(name="GaAs", detector="gaas"),
    Case(name="CdTe", detector="cdte"),
    Case(name="CdTe, a fortieth of the counts", detector="cdte", times=0.025),
    Case(name="CdTe, twice the threshold spread", detector="cdte", spread=2.0),
)


def instrument(case: Case, *, pixels: int) -> Instrument:
    """The case's detector with a tube that drifts and is not even over the rows."""
    (bench,) = (b for b in BENCHES if b.detector == case.detector)
    made = Instrument.build(replace(bench, loss=case.loss), pixels=pixels)
    wide = made.detector.spread
    spread = replace(
        wide,
        threshold_kev=case.spread * wide.threshold_kev,
        threshold_common_kev=case.spread * wide.threshold_common_kev,
    )
    return replace(
        made,
        detector=replace(made.detector, spread=spread),
        tube=replace(made.tube, drift_step=DRIFT_STEP, heel=HEEL),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Figures:
    """What came of a case."""

    calibration: Calibration
    scores: tuple[MaterialScore, ...]
    seconds: float


@cache
def calibrated(case: Case, *, pixels: int) -> tuple[Instrument, Calibration]:
    """The case's instrument, and what its wedge scan teaches."""
    made = instrument(case, pixels=pixels)
    return made, WedgeCalibrator().fit(made.wedge_scan().scan).calibration_


def run(case: Case, *, pixels: int, repeats: int = 16) -> Figures:
    """Expose, calibrate, decompose and score."""
    start = perf_counter()
    as_wedge = replace(case, name="", times=1.0)
    made, calibration = calibrated(as_wedge, pixels=pixels)
    known = expose(made, repeats=repeats, times=case.times, seed=SEED + 3)
    decomposer = MaterialDecomposer(calibration)
    maps = decomposer.decompose(known.scan)
    return Figures(
        calibration=calibration,
        scores=score(maps, known, bound(decomposer, known)),
        seconds=perf_counter() - start,
    )


def lines(case: Case, figures: Figures) -> list[str]:
    """Rows of the table in Markdown, one a material."""
    promise = figures.calibration.promise
    assert promise is not None
    # the promise counts in errors of one wedge step
    promised = promise.fixed_pattern * np.sqrt(case.times)
    return [
        _row(
            case.name,
            s.material,
            f"{rms(s.bias):.3f}, {np.abs(s.bias).max():.3f}",
            f"{np.median(s.repeat_ratio):.3f}",
            f"{np.median(s.rmse):.3f}, {s.rmse.max():.3f}",
            f"{s.pattern:.3f} +- {s.pattern_error:.3f}",
            f"{promised[m]:.3f}",
            f"{s.stated:.3f}",
            f"{100 * s.flagged:.2f} %",
            f"{figures.seconds:.0f}",
        )
        for m, s in enumerate(figures.scores)
    ]


def _row(*cells: str) -> str:
    return f"| {' | '.join(cells)} |"


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("case", nargs="*", default=[""])
    parser.add_argument("--pixels", type=int, default=32)
    options = parser.parse_args()
    sys.stdout.write(f"{_row(*TITLES)}\n{'|---' * len(TITLES)}|\n")
    for case in CASES:
        if any(part in case.name for part in options.case):
            rows = lines(case, run(case, pixels=options.pixels))
            sys.stdout.write("\n".join(rows) + "\n")
            sys.stdout.flush()


if __name__ == "__main__":
    main()
