"""Iodine in a rack of vials, found by its K edge; everything here is invented."""

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
    rehearsal = Rehearsal.from_words(__doc__, folder="iodine-vials")
    wedge = rehearsal.scan(HERE / "wedge.toml")
    rack = rehearsal.scan(HERE / "rack.toml")
    calibration = rehearsal.calibrator().fit(wedge.scan).calibration_
    maps = MaterialDecomposer(calibration).decompose(rack.scan)
    rehearsal.keep(calibration, maps)

    found = vials(maps, rack.truth)
    line = straight_line(found)
    report(found, line, rehearsal.folder)
    iodine = TO_MG * mean_of_repeats(maps, IODINE)
    draw(iodine, found, line, rehearsal.folder / "iodine.png")


def vials(maps: Maps, truth: ScanTruth) -> list[Vial]:
    """Mean iodine of each vial over its pixels and all repeats."""
    result = []
    for index, name in enumerate(truth.region_name):
        inside = truth.region == index
        found = region_mean(maps, inside, IODINE)
        if not name.endswith("mg/cm2") or found is None:
            continue
        prepared = truth.object_areal_density[IODINE][inside].mean()
        result.append(
            Vial(
                prepared=TO_MG * float(prepared),
                found=TO_MG * found.value,
                error=TO_MG * found.error,
                limit=TO_MG * DETECTION * found.error,
                pixel_error=TO_MG * found.single_error,
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
