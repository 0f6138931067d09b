"""The picture of the bone: its map, and how far each field is from what was drawn."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting.drawing import Sheet, page_style
from spectral.reporting.palette import MUTED, amount_scale, marker, rank_colours

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from numpy.typing import NDArray
    from run import Field

BONES_MM = (0.0, 1.0, 2.0, 4.0, 8.0)
BANDS_MM = ("0", "1", "2", "4", "8", "0")
TISSUES_MM = ("20", "40", "60", "80", "100")


def draw(mean_mm: NDArray[np.float64], found: Sequence[Field], path: Path) -> None:
    """Draw map, departures and single-pixel errors into a PNG file."""
    sheet = Sheet(4.0, width=13.0, columns=3, column_widths=(1.25, 1.0, 1.0))
    with page_style():
        left, middle, right = sheet.axes
        image = left.imshow(
            mean_mm,
            extent=(0.0, len(TISSUES_MM), len(BANDS_MM), 0.0),
            cmap=amount_scale(),
            vmin=0.0,
            vmax=9.0,
            aspect="auto",
        )
        left.set_xticks(np.arange(len(TISSUES_MM)) + 0.5, TISSUES_MM)
        left.set_yticks(np.arange(len(BANDS_MM)) + 0.5, BANDS_MM)
        left.set_title("bone found in each pixel")
        left.set_xlabel("soft tissue drawn, mm")
        left.set_ylabel("bone drawn, mm")
        sheet.figure.colorbar(image, ax=left, label="bone found, mm")
        for k, (bone, colour) in enumerate(
            zip(BONES_MM, rank_colours(len(BONES_MM)), strict=True)
        ):
            own = [f for f in found if abs(f.bone_mm - bone) < 0.05]
            tissue = np.array([f.tissue_mm for f in own]) + 1.6 * (k - 2)
            label = f"{bone:g} mm bone" if bone else "no bone"
            middle.errorbar(
                tissue,
                [f.found_mm - f.bone_mm for f in own],
                yerr=[1.96 * f.error_mm for f in own],
                fmt=marker(k),
                color=colour,
                capsize=2,
                label=label,
            )
            right.plot(
                [f.tissue_mm for f in own],
                [f.pixel_error_mm for f in own],
                marker=marker(k),
                color=colour,
                label=label,
            )
        middle.axhline(0.0, color=MUTED, lw=0.8)
        middle.set_title("mean of each field, with 95 % interval")
        middle.set_xlabel("soft tissue, mm")
        middle.set_ylabel("found less drawn, mm of bone")
        right.set_title("error of one pixel in one exposure")
        right.set_xlabel("soft tissue, mm")
        right.set_ylabel("one standard deviation, mm of bone")
        right.set_ylim(bottom=0.0)
        right.legend(loc="upper left")
        sheet.figure.savefig(path, dpi=110, facecolor="white")
