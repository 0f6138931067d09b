"""Pictures of what changed between two calibrations."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting import panels
from spectral.reporting.drawing import Picture, Sheet
from spectral.reporting.maps_pictures import map_height
from spectral.reporting.maps_summary import median
from spectral.reporting.palette import INK, amount_scale, rank_colours
from spectral.reporting.wording import fixed, listed, number, percent

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from spectral.calibration.comparison import CalibrationComparison

_MOST_IN_ROW = 5
_CHANGE_NOTE = (
    "New minus old true threshold of every pixel that is good in both. Histograms show "
    "the median pixel as a line; the bar beneath it is as wide as twice the spread "
    "that the errors of both calibrations explain."
)


def threshold_change_pictures(comparison: CalibrationComparison) -> list[Picture]:
    """Histogram and map of each threshold's change, up to five to a sheet."""
    count = comparison.thresholds_kev.size
    sheets = -(-count // _MOST_IN_ROW)
    each = -(-count // sheets)
    limits = panels.signed_limits(comparison.change_kev)
    return [
        _threshold_sheet(
            comparison, range(start, min(start + each, count)), limits, each
        )
        for start in range(0, count, each)
    ]


def _threshold_sheet(
    comparison: CalibrationComparison,
    chosen: range,
    limits: panels.Limits,
    columns: int,
) -> Picture:
    shape = comparison.area_percent.shape
    wide = 11.0 / max(columns, 3)
    tall = min(5.0, max(0.7, (wide - 0.5) * shape[0] / shape[1]) + 0.7)
    sheet = Sheet(
        2.1 + tall, rows=2, columns=columns, row_heights=(1.6, tall),
        width=min(11.0, 0.8 + wide * columns),
    )  # fmt: skip
    for spare in range(len(chosen), columns):
        for axes in (sheet.axes[spare], sheet.axes[columns + spare]):
            axes.set_visible(False)
    maps = sheet.axes[columns : columns + len(chosen)]
    for place, k in enumerate(chosen):
        _draw_change(sheet.axes[place], comparison, k, limits)
        middle = fixed(float(comparison.median_kev[k]), 3, sign=True)
        spread = fixed(float(comparison.spread_kev[k]), 3)
        panels.draw_signed_map(
            maps[place],
            comparison.change_kev[k],
            label="keV, new minus old",
            title=f"{middle}, spread {spread}",
            limits=limits,
            bar_beside=maps if place == len(chosen) - 1 else [],
        )
        if place:
            sheet.axes[place].set_ylabel("")
            maps[place].set_ylabel("")
    words = [
        f"{number(float(comparison.thresholds_kev[k]))} keV: median pixel "
        f"{fixed(float(comparison.median_kev[k]), 3, sign=True)} keV, spread "
        f"{fixed(float(comparison.spread_kev[k]), 3)} keV"
        for k in chosen
    ]
    return sheet.picture(
        alt=(
            "Histograms of the change of each threshold, above maps of it. "
            f"{listed(words)}."
        ),
        caption=f"{_CHANGE_NOTE} {panels.SIGNED_NOTE}{panels.block_note(shape)}",
    )


def _draw_change(
    axes: Axes,
    comparison: CalibrationComparison,
    threshold: int,
    limits: panels.Limits,
) -> None:
    """Histogram of one threshold's change, its median and expected spread."""
    panels.draw_histogram(
        axes,
        comparison.change_kev[threshold],
        label="change (keV)",
        title=(
            f"{threshold + 1}: set to "
            f"{number(float(comparison.thresholds_kev[threshold]))} keV"
        ),
        colour=rank_colours(comparison.thresholds_kev.size)[threshold],
        limits=panels.Limits(1.15 * limits.low, 1.15 * limits.high),
        bins=32,
    )
    middle = float(comparison.median_kev[threshold])
    expected = float(comparison.expected_spread_kev[threshold])
    panels.line_over_bars(axes, 0.0, middle=False)
    panels.line_over_bars(axes, middle)
    top = axes.get_ylim()[1]
    axes.plot(
        [middle - expected, middle + expected], [0.06 * top] * 2, color=INK, linewidth=2.5,
        solid_capstyle="butt",
    )  # fmt: skip
    axes.locator_params(nbins=4)


def area_change_picture(comparison: CalibrationComparison) -> Picture:
    """Maps of the change of area, and of how surely each pixel changed."""
    shape = comparison.area_percent.shape
    sheet = Sheet(map_height(shape, 2), columns=2)
    panels.draw_signed_map(
        sheet.axes[0],
        comparison.area_percent,
        label="%, new over old",
        title="sensitive area, mean taken off",
    )
    share = float(comparison.changed.sum() / comparison.both_good.sum())
    per_freedom = comparison.chi_square / np.maximum(comparison.freedom, 1)
    panels.draw_map(
        sheet.axes[1],
        per_freedom,
        scale=amount_scale(),
        limits=panels.robust_limits(per_freedom),
        label="chi-square per degree of freedom",
        title="change of a pixel over its errors",
    )
    return sheet.picture(
        alt=(
            f"Two maps: area changed by {fixed(comparison.area_spread_percent, 2)} % "
            "(standard deviation between pixels); chi-square per degree of freedom of "
            f"each pixel's change, median {number(median(per_freedom))}, "
            f"{percent(share, 2)} of the pixels beyond the limit."
        ),
        caption=(
            "Unchanged pixels have a chi-square per degree of freedom near 1. "
            f"{panels.LIMITS_NOTE} The area's colours are symmetric about zero."
            f"{panels.block_note(shape)}"
        ),
    )
