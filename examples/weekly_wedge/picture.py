"""The picture of the week: drift of every pixel's thresholds, and of all together."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

from spectral.calibration.calibration_file import read_calibration
from spectral.calibration.comparison import compare
from spectral.reporting.drawing import Sheet, page_style
from spectral.reporting.palette import (
    ACCENT,
    MUTED,
    marker,
    material_colour,
    signed_scale,
)
from spectral.scans.truth_file import read_truth

SHOWN = 1
"""The threshold whose map is drawn, counted from 0."""


def main(folder: Path) -> None:
    """Draw map, profile and mean drift into a PNG file."""
    old = read_calibration(folder / "last_week.calibration.h5")
    new = read_calibration(folder / "this_week.calibration.h5")
    change = compare(old, new)
    planted = (
        read_truth(folder / "this_week.truth.h5").threshold_drift.mean(axis=0)
        - read_truth(folder / "last_week.truth.h5").threshold_drift.mean(axis=0)
    )  # fmt: skip
    sheet = Sheet(4.0, width=13.0, columns=3, column_widths=(1.1, 1.0, 1.0))
    with page_style():
        left, middle, right = sheet.axes
        image = left.imshow(
            change.change_kev[SHOWN], cmap=signed_scale(), vmin=-1.5, vmax=1.5
        )
        kev = change.thresholds_kev
        left.set_title(f"drift of the threshold at {kev[SHOWN]:g} keV")
        left.set_xlabel("column")
        left.set_ylabel("row")
        sheet.figure.colorbar(image, ax=left, label="keV", shrink=0.8)
        column = np.arange(planted.shape[1])
        usable = np.isfinite(change.change_kev)
        count = np.maximum(usable.sum(axis=(0, 1)), 1)
        total = np.where(usable, change.change_kev, 0.0).sum(axis=(0, 1))
        middle.plot(
            column, total / count, marker=marker(0), ls="none",
            color=material_colour(0), label="found, mean of rows and thresholds",
        )  # fmt: skip
        middle.plot(
            column,
            planted.mean(axis=0),
            color=ACCENT,
            label="planted",
            lw=1.2,
            ds="steps-mid",
        )
        middle.errorbar(
            0.9 * planted.shape[1], 0.2, yerr=1.96 * change.median_error_kev.mean(),
            color=MUTED, capsize=3, label="what moves all columns alike, 95 %",
        )  # fmt: skip
        middle.set_title("drift from column to column")
        middle.set_xlabel("column")
        middle.set_ylabel("keV")
        middle.set_ylim(min(0.0, float((total / count).min()) - 0.05), 1.3)
        middle.legend(loc="upper left")
        good = change.both_good
        right.errorbar(
            kev, change.change_kev[:, good].mean(axis=1),
            yerr=1.96 * change.median_error_kev, fmt=marker(0), capsize=3,
            color=material_colour(0), label="found, 95 % interval",
        )  # fmt: skip
        right.axhline(
            float(planted[good].mean()), color=ACCENT, lw=1.2, label="planted"
        )
        right.axhline(0.0, color=MUTED, lw=0.8)
        right.set_title("drift, mean of all pixels")
        right.set_xlabel("threshold, keV")
        right.set_ylabel("keV")
        right.set_ylim(0.0, 1.3)
        right.legend(loc="upper left")
        sheet.figure.savefig(folder / "drift.png", dpi=110, facecolor="white")


if __name__ == "__main__":
    main(Path(sys.argv[1]))
