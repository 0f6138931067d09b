"""Pictures of maps."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from spectral.reporting import panels
from spectral.reporting.drawing import Picture, Sheet
from spectral.reporting.maps_summary import (
    DEVIANCE_EDGES,
    median,
    middle_range,
    quartile_errors,
)
from spectral.reporting.palette import (
    ACCENT,
    INK,
    MUTED,
    STANDBY,
    amount_scale,
    error_scale,
    marker,
    rank_colours,
)
from spectral.reporting.reason_map import Reason, draw_reasons, rarest_note
from spectral.reporting.wording import GRAMS, count, listed, number, percent
from spectral.scans.flags import MEANING

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from numpy.typing import NDArray

    from spectral.reporting.maps_summary import MapsSummary

FLAG_NAMES = {flag: str(flag.name).replace("_", " ").lower() for flag in MEANING}
FLAG_REASONS = tuple(
    Reason(bit=int(flag), name=FLAG_NAMES[flag], meaning=meaning)
    for flag, meaning in MEANING.items()
)
_DEVIANCE_RANGE = 5.0
_TALLEST = 6.0
_FLAT_HEIGHT = 1.1
_MOST_PROFILE_POINTS = 480
_MOST_MARKED_POINTS = 160


def map_height(shape: tuple[int, ...], columns: int) -> float:
    """Height in inches of a row of maps of this shape."""
    y, x = shape
    wide = x >= 2 * y
    each = 11.0 / columns - (0.75 if wide else 1.3)
    around = 1.35 if wide else 0.95
    return min(_TALLEST, max(_FLAT_HEIGHT, each * y / x) + around)


def material_picture(summary: MapsSummary, index: int, *, row: int) -> Picture:
    """Areal density of a material, beside its errors; the profile's row is marked."""
    name = summary.material[index]
    shape = summary.flags.shape
    many = len(summary.exposure) > 1
    sheet = Sheet(map_height(shape, 3), columns=3)
    density = summary.density[index]
    panels.draw_map(
        sheet.axes[0],
        density,
        scale=amount_scale(),
        limits=panels.robust_limits(density),
        label=GRAMS,
        title=f"{name}, {'mean of the exposures' if many else 'areal density'}",
    )
    panels.mark_row(sheet.axes[0], row)
    for axes, values, title in (
        (sheet.axes[1], summary.single_error[index], "error of a single exposure"),
        (sheet.axes[2], summary.calibration_error[index], "error from the calibration"),
    ):
        limits = panels.robust_limits(values)
        panels.draw_map(
            axes, values, scale=error_scale(), limits=limits, label=GRAMS, title=title
        )
    low, high = middle_range(density)
    single, common = (
        number(median(e[index]))
        for e in (summary.single_error, summary.calibration_error)
    )
    return sheet.picture(
        alt=(
            f"Three maps of {name}. Areal density: median {number(median(density))} "
            f"{GRAMS}, 5th to 95th percentile {number(low)} to {number(high)}. "
            f"Error of a single exposure: median {single} {GRAMS}. Error from the "
            f"calibration: median {common} {GRAMS}."
        ),
        caption=(
            f"{name}. Arrowheads mark row {row}, that of the profile below. Errors are "
            f"one standard deviation, each with a scale of its own. {panels.LIMITS_NOTE}{panels.block_note(shape)}"
        ),
    )


def flags_picture(summary: MapsSummary) -> Picture:
    """Map of the flags, and how much of each exposure they take."""
    shape = summary.flags.shape
    many = len(summary.exposure) > 1
    title = "flagged in any exposure" if many else "flags"
    sheet = Sheet(map_height(shape, 3) + 0.1, width=7.4)
    draw_reasons(sheet.axes[0], summary.flags, FLAG_REASONS, title=title)
    found = [
        f"{r.name} {np.count_nonzero(summary.flags & r.bit)}"
        for r in FLAG_REASONS
        if np.any(summary.flags & r.bit)
    ]
    return sheet.picture(
        alt=(
            f"Map of the flags: {percent(summary.sound_share)} of the pixels have "
            f"none. Pixels by flag: {listed(found) if found else 'none'}."
        ),
        caption=(
            "Pixels by flag. A pixel with several flags shows the rarest of them."
            f"{rarest_note(shape)}"
        ),
    )


def deviance_picture(summary: MapsSummary, freedom: int | None) -> Picture:
    """Deviances against what counting statistics alone gives, and their map."""
    shape = summary.flags.shape
    sheet = Sheet(max(3.2, map_height(shape, 3)), columns=2, column_widths=(1.35, 1.0))
    _draw_deviances(sheet.axes[0], summary, freedom)
    panels.draw_map(
        sheet.axes[1],
        summary.deviance,
        scale=amount_scale(),
        limits=panels.robust_limits(summary.deviance),
        label="deviance per degree of freedom",
        title="mean of the exposures" if len(summary.exposure) > 1 else "its map",
    )
    expected = ""
    if freedom:
        alone = number(float(chi2.median(freedom)) / freedom)
        expected = f" Counting statistics alone would give a median of {alone}."
    return sheet.picture(
        alt=(
            f"Histogram of {summary.deviance_counts.sum()} deviances per degree of "
            f"freedom, median {number(summary.deviance_percentile(50.0))}.{expected} "
            "Beside it the map of the deviance."
        ),
        caption=(
            "A histogram shifted or stretched to the right means that something "
            "besides counting moves the counts: an object outside the basis, a "
            "threshold that drifted, the calibration's own error. In the map structure "
            f"shows where. {panels.LIMITS_NOTE}{panels.block_note(shape)}"
        ),
    )


def _draw_deviances(axes: Axes, summary: MapsSummary, freedom: int | None) -> None:
    """Histogram of the deviances, under the density that counting alone gives."""
    total = int(summary.deviance_counts.sum())
    edges, heights = _histogram(summary.deviance_counts)
    axes.stairs(
        heights, edges, fill=True, color=STANDBY, label=f"{total} unflagged estimates"
    )
    if freedom:
        x = np.linspace(1e-3, edges[-1], 400)
        axes.plot(
            x,
            chi2.pdf(x * freedom, freedom) * freedom,
            color=ACCENT,
            label=f"counting alone: chi-square, {freedom} degrees of freedom",
        )
        axes.set_ylim(0.0, 1.25 * max(float(heights.max()), _peak(freedom)))
    axes.set_xlim(0.0, edges[-1])
    axes.legend(loc="upper right")
    panels.axis_words(
        axes,
        x="deviance per degree of freedom",
        y="share of the estimates per unit",
        title="how well the counts are met",
    )
    beyond = int(summary.deviance_counts[DEVIANCE_EDGES[1:] > edges[-1] + 1e-9].sum())
    if beyond:
        panels.note(axes, f"{beyond} beyond this range", height=0.72)


def _peak(freedom: int) -> float:
    """Largest density of chi-square over its freedom, for scaling the axis."""
    if freedom < 3:
        return 0.6 if freedom == 2 else 0.8
    return float(chi2.pdf(freedom - 2.0, freedom) * freedom)


def _histogram(
    counts: NDArray[np.int64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The summary's fine histogram in coarser bins, as a density."""
    total = max(int(counts.sum()), 1)
    width = 10
    keep = round(_DEVIANCE_RANGE / (float(DEVIANCE_EDGES[1]) * width)) * width
    edges = DEVIANCE_EDGES[: keep + 1 : width]
    heights = counts[:keep].reshape(-1, width).sum(axis=1) / total
    return edges, heights / np.diff(edges)


def profile_picture(summary: MapsSummary, row: int) -> Picture:
    """Each material along one row, with both errors."""
    materials = len(summary.material)
    sheet = Sheet(0.5 + 1.9 * materials, rows=materials)
    for i, axes in enumerate(sheet.axes):
        _draw_profile(axes, summary, i, row)
    sheet.axes[-1].set_xlabel("column (pixel)")
    sheet.axes[0].legend(ncols=3, loc="lower right", bbox_to_anchor=(1.0, 1.0))
    words = [
        f"{name}: median {number(median(summary.density[i, row]))} {GRAMS}"
        for i, name in enumerate(summary.material)
    ]
    together = _together(summary)
    thinned = f" Each point is the median of {together} columns." * (together > 1)
    return sheet.picture(
        alt=f"Profiles along row {row}. {listed(words)}.",
        caption=(
            "Bands are one standard deviation to each side. The calibration's part is "
            f"the same in every repeat: averaging does not remove it.{thinned}"
        ),
    )


def _together(summary: MapsSummary) -> int:
    """Columns that one point of a profile stands for."""
    columns = int(summary.flags.shape[1])
    return -(-columns // _MOST_PROFILE_POINTS)


def _draw_profile(axes: Axes, summary: MapsSummary, index: int, row: int) -> None:
    together = _together(summary)
    value, single, common = (
        thinned(field[index, row], together)
        for field in (summary.density, summary.single_error, summary.calibration_error)
    )
    columns = summary.flags.shape[1]
    first = 0.5 * (together - 1)
    place = first + together * np.arange(value.size, dtype=np.float64)
    _band(axes, place, value, single, STANDBY, "± error of a single exposure")
    _band(axes, place, value, common, ACCENT, "± error from the calibration")
    many = len(summary.exposure) > 1
    axes.plot(
        place,
        value,
        color=INK,
        linewidth=1.1,
        marker="." if value.size <= _MOST_MARKED_POINTS else "",
        markersize=3.5,
        label="mean of the exposures" if many else "estimate",
    )
    axes.set_xlim(-0.5, columns - 0.5)
    title = f"{summary.material[index]}, row {row}"
    panels.axis_words(axes, x="", y=GRAMS, title=title)


def thinned(values: NDArray[np.float64], together: int) -> NDArray[np.float64]:
    """Medians of the finite values of neighbours; NaN where there is none."""
    if together == 1:
        return values
    full = np.full(-(-values.size // together) * together, np.nan)
    full[: values.size] = values
    groups = full.reshape(-1, together)
    some = np.isfinite(groups).any(axis=1)
    groups[~some] = 0.0
    return np.where(some, np.nanmedian(groups, axis=1), np.nan)


def _band(
    axes: Axes,
    place: NDArray[np.float64],
    value: NDArray[np.float64],
    error: NDArray[np.float64],
    colour: str,
    label: str,
) -> None:
    axes.fill_between(
        place,
        value - error,
        value + error,
        color=colour,
        alpha=0.45,
        linewidth=0.0,
        step="mid" if place.size <= _MOST_MARKED_POINTS else None,
        label=label,
    )


def course_picture(summary: MapsSummary) -> Picture:
    """What happens from exposure to exposure."""
    materials = len(summary.material)
    sheet = Sheet(1.6 * (materials + 1) + 0.5, rows=materials + 1)
    for i in range(materials):
        _draw_course(sheet.axes[i], summary, i)
    axes = sheet.axes[-1]
    axes.plot(summary.exposure, 100.0 * summary.flagged_share, color=INK, marker=".")
    axes.set_ylim(0.0, 110.0 * max(float(summary.flagged_share.max()), 0.01))
    axes.locator_params(axis="x", integer=True)
    panels.axis_words(
        axes, x="exposure (index in the scan)", y="%", title="pixels with a flag"
    )
    worst = int(np.argmax(summary.flagged_share))
    return sheet.picture(
        alt=(
            f"Median areal density of {listed(summary.material)} and share of flagged "
            f"pixels in {count(len(summary.exposure), 'exposure')}; most flags in "
            f"exposure {summary.exposure[worst]}: "
            f"{percent(float(summary.flagged_share[worst]))}."
        ),
        caption=(
            "Each quartile over the pixels, minus its own mean over the exposures; "
            "bars: one standard deviation of it by the errors of the pixels. Repeats "
            "of one object should stay near zero; a slope is a drift of tube, "
            "thresholds or object."
        ),
    )


def _draw_course(axes: Axes, summary: MapsSummary, index: int) -> None:
    """Quartiles of one material in each exposure, minus their own means."""
    axes.axhline(0.0, color=MUTED, linewidth=0.8)
    error = quartile_errors(summary.density[index], summary.single_error[index])
    for q, words in enumerate(("lower quartile", "median", "upper quartile")):
        values = summary.quartiles[:, index, q]
        middle = float(np.nanmean(values)) if np.isfinite(values).any() else np.nan
        axes.errorbar(
            summary.exposure,
            values - middle,
            yerr=error[q],
            capsize=2.0,
            color=rank_colours(3)[q],
            marker=marker(q),
            label=f"{words} of the pixels, minus {number(middle, 4)}",
        )
    axes.legend(ncols=3, loc="lower right", bbox_to_anchor=(1.0, 1.0))
    panels.axis_words(axes, x="", y=f"change, {GRAMS}", title=summary.material[index])
    axes.locator_params(axis="x", integer=True)
