"""Bone thickness behind 20 to 100 mm of soft tissue; everything here is invented.

Research data on a model of tissue: no medical device, no diagnosis.
"""

from __future__ import annotations

import csv
import sys
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from picture import draw

from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.demo.region_mean import mean_of_repeats, region_mean
from spectral.demo.rehearsal import Rehearsal

if TYPE_CHECKING:
    from spectral.scans.maps import Maps
    from spectral.scans.truth_file import ScanTruth

HERE = Path(__file__).parent
TISSUE, BONE = 0, 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Field:
    """One field of the object: soft tissue and bone as drawn, and bone as found."""

    tissue_mm: float
    bone_mm: float
    found_mm: float
    error_mm: float
    pixel_error_mm: float
    flagged: float


def main() -> None:
    """Simulate, calibrate, decompose, compare with what was drawn."""
    rehearsal = Rehearsal.from_words(__doc__, folder="bone-and-soft-tissue")
    wedge = rehearsal.scan(HERE / "wedge.toml")
    leg = rehearsal.scan(HERE / "leg.toml")
    calibration = rehearsal.calibrator().fit(wedge.scan).calibration_
    maps = MaterialDecomposer(calibration).decompose(leg.scan)
    rehearsal.keep(calibration, maps)

    mm = np.array([0.1 * m.density_g_cm3 for m in calibration.materials])
    found = fields(maps, leg.truth, mm)
    report(found, rehearsal.folder)
    draw(mean_of_repeats(maps, BONE) / mm[BONE], found, rehearsal.folder / "bone.png")


def fields(maps: Maps, truth: ScanTruth, mm: np.ndarray) -> list[Field]:
    """Each field of the object: mean over its pixels and all repeats.

    Parameters
    ----------
    maps : Maps
    truth : ScanTruth
    mm : array, shape (material,), in g/cm2
        What one millimetre of each material weighs.
    """
    result = []
    drawn = truth.object_areal_density
    for tissue, bone in {(float(t), float(b)) for t, b in drawn.reshape(2, -1).T}:
        inside = (drawn[TISSUE] == tissue) & (drawn[BONE] == bone)
        found = region_mean(maps, inside, BONE)
        if found is None:
            continue
        result.append(
            Field(
                tissue_mm=tissue / mm[TISSUE],
                bone_mm=bone / mm[BONE],
                found_mm=found.value / mm[BONE],
                error_mm=found.error / mm[BONE],
                pixel_error_mm=found.single_error / mm[BONE],
                flagged=found.flagged,
            )
        )
    return sorted(result, key=lambda f: (f.tissue_mm, f.bone_mm))


def report(found: list[Field], out: Path) -> None:
    """Write the table, and put it on the screen."""
    with (out / "bone.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, list(asdict(found[0])))
        writer.writeheader()
        writer.writerows(asdict(f) for f in found)
    lines = ["soft tissue mm   bone mm      found mm     one pixel, one exposure +-"]
    lines += [
        f"{f.tissue_mm:14.0f}{f.bone_mm:10.1f}{f.found_mm:9.3f} +- {f.error_mm:.3f}"
        f"{f.pixel_error_mm:18.2f}"
        for f in found
    ]
    lines.append(
        "Research data on an invented object: no medical device, no diagnosis."
    )
    sys.stdout.write("\n".join(lines) + "\n")


if __name__ == "__main__":
    main()
