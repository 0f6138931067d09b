"""Iodine in a rack of vials, found by its K edge; everything here is invented."""

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
    from numpy.typing import NDArray

    from spectral.scans.maps import Maps
    from spectral.scans.truth_file import ScanTruth

HERE = Path(__file__).parent
IODINE = 2
TO_MG = 1000.0
DETECTION = 3.29
"""L. A. Currie, Anal. Chem. 40 (1968) 586: well-known blank, 5 % errors both ways."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Vial:
    """One vial, in mg/cm2 of iodine: prepared, found, and what could be found."""

    prepared: float
    found: float
    error: float
    limit: float
    pixel_error: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """Weighted straight line of found against prepared, with errors."""

    slope: float
    slope_error: float
    offset: float
    offset_error: float
    chi_square: float
    freedom: int


def main() -> None:
    """Simulate, calibrate with three materials, decompose, draw the line."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--out", type=Path, default=Path("iodine-vials"))
    parser.add_argument("--pixels", type=int, nargs=2, metavar=("ROWS", "COLUMNS"))
    parser.add_argument("--quick", action="store_true", help="a rougher calibration")
    options = parser.parse_args()
    out: Path = options.out
    out.mkdir(parents=True, exist_ok=True)
    pixels = tuple(options.pixels) if options.pixels else None

    wedge = simulate_script(HERE / "wedge.toml", pixels=pixels)
    rack = simulate_script(HERE / "rack.toml", pixels=pixels)
    write_scan(wedge.scan, out / "wedge.h5")
    write_scan(rack.scan, out / "rack.h5")
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
    maps = MaterialDecomposer(calibration).decompose(open_scan(out / "rack.h5"))
    write_maps(maps, out / "maps.h5")

    found = vials(maps, rack.truth)
    line = straight_line(found)
    report(found, line, out)
    usable = maps.flags == 0
    count = usable.sum(axis=0)
    total = np.where(usable, maps.areal_density[:, IODINE], 0.0).sum(axis=0)
    mean = np.where(count > 0, TO_MG * total / np.maximum(count, 1), np.nan)
    draw(mean, found, line, out / "iodine.png")


def vials(maps: Maps, truth: ScanTruth) -> list[Vial]:
    """Mean iodine of each vial over its pixels and all repeats."""
    result = []
    usable = maps.flags == 0
    for index, name in enumerate(truth.region_name):
        inside = truth.region == index
        chosen = usable & inside
        if not name.endswith("mg/cm2") or not chosen.any():
            continue
        single = maps.areal_density_errors[:, IODINE][chosen].astype(np.float64)
        own = maps.calibration_errors[:, IODINE][chosen].astype(np.float64)
        pixels = int(chosen.any(axis=0).sum())
        error = np.sqrt(np.mean(single**2) / single.size + np.mean(own**2) / pixels)
        found = maps.areal_density[:, IODINE][chosen].mean(dtype=float)
        result.append(
            Vial(
                prepared=TO_MG
                * float(truth.object_areal_density[IODINE][inside].mean()),
                found=TO_MG * float(found),
                error=TO_MG * float(error),
                limit=TO_MG * DETECTION * float(error),
                pixel_error=TO_MG * float(np.median(single)),
            )
        )
    return sorted(result, key=lambda v: v.prepared)


def straight_line(found: list[Vial]) -> Line:
    """Weighted least squares of found against prepared."""
    prepared = np.array([v.prepared for v in found])
    value = np.array([v.found for v in found])
    weight = 1.0 / np.array([v.error for v in found])
    design: NDArray[np.float64] = np.stack([prepared, np.ones(prepared.size)], axis=1)
    covariance = np.linalg.inv((design * weight[:, None] ** 2).T @ design)
    slope, offset = covariance @ (design.T @ (weight**2 * value))
    rest = (value - slope * prepared - offset) * weight
    slope_error, offset_error = np.sqrt(np.diag(covariance))
    return Line(
        slope=float(slope),
        slope_error=float(slope_error),
        offset=float(offset),
        offset_error=float(offset_error),
        chi_square=float(rest @ rest),
        freedom=len(found) - 2,
    )


def report(found: list[Vial], line: Line, out: Path) -> None:
    """Write the table, and put it on the screen."""
    with (out / "iodine.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, list(asdict(found[0])))
        writer.writeheader()
        writer.writerows(asdict(v) for v in found)
    lines = [
        "iodine, mg/cm2",
        "prepared         found      detection limit   one pixel",
    ]
    lines += [
        f"{v.prepared:8.1f}{v.found:10.2f} +- {v.error:.2f}{v.limit:15.2f}"
        f"{v.pixel_error:14.1f}"
        for v in found
    ]
    lines.append(
        f"found = ({line.slope:.3f} +- {line.slope_error:.3f}) prepared + "
        f"({line.offset:.2f} +- {line.offset_error:.2f}); chi-square "
        f"{line.chi_square:.1f} for {line.freedom} degrees of freedom"
    )
    sys.stdout.write("\n".join(lines) + "\n")


if __name__ == "__main__":
    main()
