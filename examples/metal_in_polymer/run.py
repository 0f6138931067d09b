"""Find and size metal inclusions in a polymer block; everything here is invented."""

from __future__ import annotations

import csv
import sys
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from picture import draw
from scipy import ndimage

from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.demo.rehearsal import Rehearsal
from spectral.physics.materials import find_material

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.maps import Maps

HERE = Path(__file__).parent
PIXEL_MM = 0.1
APERTURE_MM = 0.22
POLYMER_MM = 40.0
METALS = ("steel", "Al")
ALARM = 5.0
"""Standard errors (root of chi-square) at which a place counts as found."""
TOLD_APART = 6.63
"""Chi-square of one degree of freedom at 1 %: the metals differ by at least this."""
DETECTION = 3.29
"""L. A. Currie, Anal. Chem. 40 (1968) 586: well-known blank, 5 % errors both ways."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Inclusion:
    """One inclusion: what was drawn, and what was found at its place."""

    metal: str
    true_mm: float
    found: bool
    named: str
    found_mm: float
    error_mm: float
    limit_mm: float


def main() -> None:
    """Simulate, calibrate, decompose, search, draw."""
    rehearsal = Rehearsal.from_words(__doc__, folder="metal-in-polymer")
    wedge = rehearsal.scan(HERE / "wedge.toml")
    part = rehearsal.scan(HERE / "part.toml")
    calibration = rehearsal.calibrator().fit(wedge.scan).calibration_
    maps = MaterialDecomposer(calibration).decompose(part.scan)
    rehearsal.keep(calibration, maps)

    rows, columns = maps.deviance.shape[1:]
    pixel_mm = PIXEL_MM * 24 / rows
    mean, weight = departures(maps)
    directions = {metal: direction(calibration, metal) for metal in METALS}
    change, signal = stand_out(mean, weight, pixel_mm)
    label, _ = ndimage.label(signal > ALARM)
    inclusions = []
    for row_mm, metal in ((0.7, "steel"), (1.7, "Al")):
        for k, true_mm in enumerate((0.05, 0.1, 0.2, 0.5, 1.0)):
            place = (row_mm / pixel_mm, (0.48 + 0.96 * k) / pixel_mm)
            inside = aperture((rows, columns), place, APERTURE_MM / pixel_mm)
            size = {m: sized(change, weight, inside, directions[m]) for m in METALS}
            named = min(METALS, key=lambda m: size[m][2])
            if abs(size["steel"][2] - size["Al"][2]) < TOLD_APART:
                named = "either"
            value, error, _ = size[metal]
            inclusions.append(
                Inclusion(
                    metal=metal,
                    true_mm=true_mm,
                    found=bool(label[inside].any()),
                    named=named,
                    found_mm=value,
                    error_mm=error,
                    limit_mm=DETECTION * error,
                )
            )
    report(inclusions, rehearsal.folder)
    draw(signal, ALARM, inclusions, pixel_mm, rehearsal.folder / "inclusions.png")


def departures(maps: Maps) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean of the repeats, and the inverse of its covariance, per pixel.

    Returns
    -------
    mean : array, shape (2, row, column), in g/cm2
    weight : array, shape (2, 2, row, column), in cm4/g2
        0 where the pixel gave nothing.
    """
    good = maps.flags == 0
    count = good.sum(axis=0)
    usable = count > 1

    def average(values: NDArray[np.float32]) -> NDArray[np.float64]:
        total = np.where(good[:, None], values, 0.0).sum(axis=0, dtype=np.float64)
        return np.where(usable, total / np.maximum(count, 1), 0.0)

    statistical = average(maps.covariance)[[[0, 1], [1, 2]]] / np.maximum(count, 1)
    statistical[[0, 1], [0, 1]] += ~usable
    # what the calibration adds is correlated between materials as the statistics are
    spread = np.sqrt(statistical[[0, 1], [0, 1]])
    extra = average(maps.calibration_errors) / spread
    covariance = statistical * (1.0 + extra[:, None] * extra[None, :])
    weight = np.linalg.inv(np.moveaxis(covariance, (0, 1), (2, 3)))
    return average(maps.areal_density), np.moveaxis(weight, (2, 3), (0, 1)) * usable


def direction(calibration: Calibration, metal: str) -> NDArray[np.float64]:
    """What 1 mm of metal in place of 1 mm of polymer adds, in g/cm2 of the basis.

    A metal outside the basis is the mixture whose attenuation comes closest over the
    energies that pass the block.
    """
    polymer, steel = calibration.materials
    if metal == steel.name:
        adds = np.array([0.0, 0.1 * steel.density_g_cm3])
    else:
        model = calibration.model
        behind = np.array([[0.1 * polymer.density_g_cm3 * POLYMER_MM, 0.0]])
        weight = np.sqrt(model.transmitted(behind)[0])
        material = find_material(metal)
        target = material.mass_attenuation(model.energy_kev)
        share, *_ = np.linalg.lstsq(
            (model.attenuation * weight).T, target * weight, rcond=None
        )
        adds = 0.1 * material.density_g_cm3 * share
    return np.asarray(adds - np.array([0.1 * polymer.density_g_cm3, 0.0]))


def stand_out(
    mean: NDArray[np.float64], weight: NDArray[np.float64], pixel_mm: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Departure from the block, and how many standard errors each place departs.

    A place is a square of about 0.3 mm around a pixel.

    Returns
    -------
    change : array, shape (2, row, column), in g/cm2
    signal : array, shape (row, column)
    """
    width = max(round(0.3 / pixel_mm), 1)
    around = width**2 * ndimage.uniform_filter(weight, (0, 0, width, width))
    around += 1e-9 * np.eye(2)[:, :, None, None]
    inverse = np.moveaxis(
        np.linalg.inv(np.moveaxis(around, (0, 1), (2, 3))), (2, 3), (0, 1)
    )
    usable = weight[0, 0] > 0.0
    block = np.median(mean[:, usable], axis=1)
    signal = np.zeros(usable.shape)
    for _ in range(8):  # what stands out is no part of the block
        change = mean - block[:, None, None]
        pull = np.einsum("ijyx,jyx->iyx", weight, change)
        pull = width**2 * ndimage.uniform_filter(pull, (0, width, width))
        signal = np.sqrt(np.einsum("iyx,ijyx,jyx->yx", pull, inverse, pull))
        near = signal < max(3.0, float(np.median(signal)))
        share = np.einsum("ijyx,jyx->i", weight * near, mean)
        block = np.linalg.solve((weight * near).sum(axis=(2, 3)), share)
    return mean - block[:, None, None], signal


def aperture(
    shape: tuple[int, int], place: tuple[float, float], radius: float
) -> NDArray[np.bool_]:
    """Pixels whose middle lies within a radius, all in pixels."""
    row, column = np.indices(shape) + 0.5
    return np.asarray(np.hypot(row - place[0], column - place[1]) < max(radius, 1.0))


def sized(
    change: NDArray[np.float64],
    weight: NDArray[np.float64],
    inside: NDArray[np.bool_],
    per_mm: NDArray[np.float64],
) -> tuple[float, float, float]:
    """Thickness in mm of a metal in an aperture, its error, and chi-square."""
    total = weight[:, :, inside].sum(axis=2)
    pull = np.einsum("ijp,jp->i", weight[:, :, inside], change[:, inside])
    mean = np.linalg.solve(total, pull)
    information = per_mm @ total @ per_mm
    size = float(per_mm @ total @ mean / information)
    rest = mean - size * per_mm
    return size, float(1.0 / np.sqrt(information)), float(rest @ total @ rest)


def report(inclusions: list[Inclusion], out: Path) -> None:
    """Write the table, and put it on the screen."""
    with (out / "inclusions.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, list(asdict(inclusions[0])))
        writer.writeheader()
        writer.writerows(asdict(i) for i in inclusions)
    lines = ["metal   drawn mm   found   named    mm +- error   detection limit mm"]
    lines += [
        f"{i.metal:8s}{i.true_mm:8.2f}{'yes' if i.found else 'no':>8s}{i.named:>8s}"
        f"{i.found_mm:9.3f} +- {i.error_mm:.3f}{i.limit_mm:12.3f}"
        for i in inclusions
    ]
    sys.stdout.write("\n".join(lines) + "\n")


if __name__ == "__main__":
    main()
