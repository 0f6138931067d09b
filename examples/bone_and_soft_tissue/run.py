"""Bone thickness behind 20 to 100 mm of soft tissue; everything here is invented.

Research data on a model of tissue: no medical device, no diagnosis.
"""

from __future__ import annotations

import argparse
import csv
import sys
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from picture import draw

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.calibrator import WedgeCalibrator
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.scans.maps_file import write_maps
from spectral.scans.scan_writing import write_scan
from spectral.scans.script import open_scan
from spectral.virtual.script_scan import simulate_script

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
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--out", type=Path, default=Path("bone-and-soft-tissue"))
    parser.add_argument("--pixels", type=int, nargs=2, metavar=("ROWS", "COLUMNS"))
    parser.add_argument("--quick", action="store_true", help="a rougher calibration")
    options = parser.parse_args()
    out: Path = options.out
    out.mkdir(parents=True, exist_ok=True)
    pixels = tuple(options.pixels) if options.pixels else None

    wedge = simulate_script(HERE / "wedge.toml", pixels=pixels)
    leg = simulate_script(HERE / "leg.toml", pixels=pixels)
    write_scan(wedge.scan, out / "wedge.h5")
    write_scan(leg.scan, out / "leg.h5")
    calibrator = (
        WedgeCalibrator(rounds=6, samples=256, leave_out=False)
        if options.quick
        else WedgeCalibrator()
    )
    write_calibration(
        calibrator.fit(open_scan(out / "wedge.h5")).calibration_,
        out / "calibration.h5",
    )
    calibration = read_calibration(out / "calibration.h5")
    maps = MaterialDecomposer(calibration).decompose(open_scan(out / "leg.h5"))
    write_maps(maps, out / "maps.h5")

    per_mm = 0.1 * calibration.materials[BONE].density_g_cm3
    density = np.array([0.1 * m.density_g_cm3 for m in calibration.materials])
    found = fields(maps, leg.truth, density)
    report(found, out)
    usable = maps.flags == 0
    picture = np.where(usable, maps.areal_density[:, BONE], np.nan)
    count = usable.sum(axis=0)
    total = np.nansum(picture, axis=0)
    mean = np.where(count > 0, total / np.maximum(count, 1), np.nan) / per_mm
    draw(mean, found, out / "bone.png")


def fields(maps: Maps, truth: ScanTruth, density: np.ndarray) -> list[Field]:
    """Each field of the object: mean over its pixels and all repeats.

    The error holds the counting statistics of all estimates, and the calibration's
    share, which repeats do not lessen.
    """
    result = []
    usable = maps.flags == 0
    for tissue, bone in {
        (float(t), float(b)) for t, b in truth.object_areal_density.reshape(2, -1).T
    }:
        inside = (truth.object_areal_density[TISSUE] == tissue) & (
            truth.object_areal_density[BONE] == bone
        )
        chosen = usable & inside
        if not chosen.any():
            continue
        single = maps.areal_density_errors[:, BONE][chosen].astype(np.float64)
        own = maps.calibration_errors[:, BONE][chosen].astype(np.float64)
        pixels = int(chosen.any(axis=0).sum())
        error = np.sqrt(np.mean(single**2) / single.size + np.mean(own**2) / pixels)
        result.append(
            Field(
                tissue_mm=tissue / density[TISSUE],
                bone_mm=bone / density[BONE],
                found_mm=float(maps.areal_density[:, BONE][chosen].mean(dtype=float))
                / density[BONE],
                error_mm=float(error) / density[BONE],
                pixel_error_mm=float(np.median(single)) / density[BONE],
                flagged=1.0 - float(usable[:, inside & (truth.kind == 0)].mean()),
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
