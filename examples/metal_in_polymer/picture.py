"""The picture of the inclusions: where something stands out, and how large it is."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting.drawing import Sheet, page_style
from spectral.reporting.palette import INK, MUTED, amount_scale, marker, material_colour
from spectral.reporting.panels import name_place

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from numpy.typing import NDArray
    from run import Inclusion


def draw(
    signal: NDArray[np.float64],
    alarm: float,
    inclusions: Sequence[Inclusion],
    pixel_mm: float,
    path: Path,
) -> None:
    """Draw map and sizes into a PNG file."""
    sheet = Sheet(4.3, width=12.0, columns=2, column_widths=(1.55, 1.0))
    with page_style():
        left, right = sheet.axes
        rows, columns = signal.shape
        extent = (0.0, columns * pixel_mm, rows * pixel_mm, 0.0)
        image = left.imshow(
            signal, extent=extent, cmap=amount_scale(), vmin=0.0, vmax=4.0 * alarm
        )
        left.contour(
            (np.arange(columns) + 0.5) * pixel_mm,
            (np.arange(rows) + 0.5) * pixel_mm,
            signal,
            levels=[alarm],
            colors="white",
            linewidths=1.2,
        )
        left.set_title(
            "what stands out of the block, and which metal it is found to be"
        )
        left.set_xlabel("mm on the detector")
        left.set_ylabel("mm")
        for k, item in enumerate(inclusions):
            row, column = divmod(k, 5)
            drawn = f"{item.metal} {item.true_mm:g} mm"
            metal = "either metal" if item.named == "either" else item.named
            said = f"found: {metal}" if item.found else "not found"
            name_place(left, 0.48 + 0.96 * column, (0.12, 2.2)[row], drawn)
            name_place(left, 0.48 + 0.96 * column, (1.2, 2.32)[row], said)
        sheet.figure.colorbar(
            image, ax=left, label="standard errors", extend="max", shrink=0.8
        )
        for m, metal in enumerate(("steel", "Al")):
            own = [i for i in inclusions if i.metal == metal]
            right.errorbar(
                [i.true_mm for i in own],
                [max(i.found_mm, 1e-3) for i in own],
                yerr=[1.96 * i.error_mm for i in own],
                fmt=marker(m),
                color=material_colour(m),
                capsize=3,
                label=f"{metal}, with 95 % interval",
            )
            limit = float(np.median([i.limit_mm for i in own]))
            right.axhline(limit, color=material_colour(m), ls=":", lw=1.2)
            right.text(
                1.35, limit * 1.08, f"limit {limit:.2g} mm", ha="right",
                color=material_colour(m), fontsize=8,
            )  # fmt: skip
        line = np.array([0.03, 1.4])
        right.plot(line, line, color=MUTED, lw=0.8, label="found = drawn")
        right.set(xscale="log", yscale="log", xlim=line, ylim=(0.002, 2.0))
        right.set_xlabel("drawn thickness, mm")
        right.set_ylabel("found thickness, mm")
        right.set_title("size, and the detection limit", color=INK)
        right.legend(loc="lower right", bbox_to_anchor=(1.0, 0.2))
        sheet.figure.savefig(path, dpi=110, facecolor="white")
