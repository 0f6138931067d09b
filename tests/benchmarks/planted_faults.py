"""Faults planted into wedge scans: which are found, and are they named right?

Run ``python -m tests.benchmarks.planted_faults`` (some ten minutes); it prints one table:
scans in which the fault was found, named as the likeliest explanation, named among the
explanations, and sound exposures called faulty. With ``--say`` it prints the sentences.
"""

from __future__ import annotations

import argparse
import re
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.errors import SpectralError
from tests.benchmarks.fault_kinds import KINDS, Planted, bench, sensor_library

if TYPE_CHECKING:
    from spectral.scans.scan import Scan


def sentences(scan: Scan, *, rounds: int = 5, samples: int = 256) -> tuple[str, ...]:
    """Findings of the calibration, or the refusal."""
    calibrator = WedgeCalibrator(rounds=rounds, samples=samples, leave_out=False)
    try:
        return calibrator.fit(scan).calibration_.findings
    except SpectralError as refusal:
        return (f"refused: {refusal}",)


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What became of one scan."""

    found: bool
    rank: int
    false_alarms: int
    exposures: int


def judge(planted: Planted, said: tuple[str, ...]) -> Outcome:
    """Compare the sentences with what was planted."""
    of_exposure = dict.fromkeys(planted.faulty, "")
    trends: list[str] = []
    for text in said:
        about = re.match(r"exposure (\d+): ", text)
        if about is None:
            trends.append(text)
        else:
            of_exposure[int(about[1])] = text
    place = int(planted.named(of_exposure, trends))
    found = all(of_exposure[e] for e in planted.faulty) if planted.faulty else place > 0
    return Outcome(
        found=found or any(text.startswith("refused") for text in said),
        rank=place,
        false_alarms=len(of_exposure) - len(planted.faulty),
        exposures=planted.scan.exposures("open", "wedge").size - len(planted.faulty),
    )


def say(line: str) -> None:
    """Print a line at once."""
    sys.stdout.write(line + "\n")
    sys.stdout.flush()


def row(kind: str, outcomes: list[Outcome]) -> str:
    """One row of the table."""
    places = [o.rank for o in outcomes]
    parts = sum(o.found for o in outcomes), places.count(1), sum(p > 0 for p in places)
    shares = "".join(f"{part:4d}/{len(places):<3d}" for part in parts)
    alarms = sum(o.false_alarms for o in outcomes)
    return f"{kind:24s}{shares}{alarms:6d}/{sum(o.exposures for o in outcomes)}"


def main() -> None:
    """Print the table."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--seeds", type=int, default=3, help="scans for each kind")
    options.add_argument("--clean", type=int, default=6, help="scans without fault")
    options.add_argument("--kind", default="", help="only kinds that contain this")
    options.add_argument("--say", action="store_true", help="print all sentences")
    options.add_argument("--folder", type=Path, help="keeps the clean scans")
    given = options.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        library, folder = sensor_library(), given.folder or Path(temporary)
        folder.mkdir(parents=True, exist_ok=True)
        seeds = range(1, 1 + max(given.seeds, given.clean))
        benches = [bench(seed, folder, library) for seed in seeds]

    def judged(planted: Planted) -> Outcome:
        said = sentences(planted.scan)
        outcome = judge(planted, said)
        if given.say:
            mark = f"    {planted.faulty}, place {outcome.rank}:"
            say("\n    ".join((mark, *said)))
        return outcome

    say(f"{'planted':24s}  found   first   named  false alarms")
    for number, (kind, plant) in enumerate(KINDS.items()):
        if given.kind in kind:
            rows = [
                judged(plant(b, np.random.default_rng([b.seed, number])))
                for b in benches[: given.seeds]
            ]
            say(row(kind, rows))
    clean = [
        judged(Planted(scan=b.clean, faulty=(), named=lambda *_: 1))
        for b in benches[: given.clean]
    ]
    if clean:
        say(row("nothing", clean))


if __name__ == "__main__":
    main()
