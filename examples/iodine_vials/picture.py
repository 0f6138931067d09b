"""The picture of the vials: iodine in the rack, and found against prepared."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting.drawing import Sheet, page_style
from spectral.reporting.palette import (
    ACCENT,
    MUTED,
    amount_scale,
    marker,
    material_colour,
)
from spectral.reporting.panels import name_place

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from numpy.typing import NDArray
    from run import Line, Vial


def draw(
    mean_mg: NDArray[np.float64], found: Sequence[Vial], line: Line, path: Path
) -> None:
    """Draw map, line and departures from it into a PNG file."""
    sheet = Sheet(4.0, width=13.0, columns=3, column_widths=(1.2, 1.0, 1.0))
    prepared = np.array([v.prepared for v in found])
    error = np.array([v.error for v in found])
    value = np.array([v.found for v in found])
    limit = float(np.median([v.limit for v in found]))
    with page_style():
        left, middle, right = sheet.axes
        image = left.imshow(
            mean_mg,
            extent=(0.0, 3.6, 2.4, 0.0),
            cmap=amount_scale(),
            vmin=-5.0,
            vmax=40.0,
        )
        for k, vial in enumerate(found):
            row, column = divmod(k, 3)
            middle_mm = (0.6 + 1.2 * column, 0.6 + 1.2 * row)
            name_place(left, *middle_mm, f"{vial.prepared:g} prepared")
        left.set_title("iodine found in the rack, mg/cm2")
        left.set_xlabel("mm on the detector")
        left.set_ylabel("mm")
        sheet.figure.colorbar(image, ax=left, label="mg/cm2", shrink=0.8)
        reach = np.array([0.0, 1.08 * prepared.max()])
        middle.plot(reach, reach, color=MUTED, lw=0.8, label="found = prepared")
        middle.errorbar(
            prepared, value, yerr=1.96 * error, fmt=marker(0), capsize=3,
            color=material_colour(0), label="vials, 95 % interval",
        )  # fmt: skip
        middle.axhline(
            limit, color=ACCENT, ls=":", lw=1.2,
            label=f"detection limit {limit:.2g} mg/cm2",
        )  # fmt: skip
        middle.set_title("found against prepared")
        middle.set_xlabel("prepared, mg/cm2")
        middle.set_ylabel("found, mg/cm2")
        middle.legend(loc="upper left")
        right.axhline(0.0, color=MUTED, lw=0.8)
        right.errorbar(
            prepared, value - prepared, yerr=1.96 * error, fmt=marker(0), capsize=3,
            color=material_colour(0), label="vials, 95 % interval",
        )  # fmt: skip
        fit = (line.slope - 1.0) * reach + line.offset
        right.plot(
            reach, fit, color=ACCENT, lw=1.2,
            label=f"line: slope {line.slope:.3f} +- {line.slope_error:.3f}",
        )  # fmt: skip
        wide = 1.6 * float(np.max(np.abs(value - prepared) + 1.96 * error))
        right.set_ylim(-wide, wide)
        right.set_title("found less prepared")
        right.set_xlabel("prepared, mg/cm2")
        right.set_ylabel("mg/cm2")
        right.legend(loc="upper left")
        sheet.figure.savefig(path, dpi=110, facecolor="white")
