"""Pictures of a calibration: thresholds, residuals and pixels."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.colors import Normalize

from spectral.reporting import panels
from spectral.reporting.calibration_figures import (
    of_pixels,
    residual_size,
    step_names,
)
from spectral.reporting.drawing import Picture, Sheet
from spectral.reporting.maps_pictures import map_height
from spectral.reporting.maps_summary import median
from spectral.reporting.palette import (
    MUTED,
    amount_scale,
    rank_colours,
    signed_scale,
)
from spectral.reporting.reason_map import Reason, draw_reasons, rarest_note
from spectral.reporting.wording import SIGMA, fixed, listed, number, percent
from spectral.scans.bad_pixels import REASON_MEANING

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.reporting.calibration_figures import Thresholds

PIXEL_REASONS = tuple(
    Reason(
        bit=int(reason),
        name=str(reason.name).replace("_", " ").lower(),
        meaning=meaning,
    )
    for reason, meaning in REASON_MEANING.items()
)
_THRESHOLDS_NOTE = (
    "All histograms have the same width in keV, all maps the same colours. Stripes or "
    "blocks follow the readout; a lone bright pixel is one whose threshold is off."
)
_MOST_NAMED_ROWS = 60
_MOST_IN_ROW = 6


def threshold_pictures(found: Thresholds) -> list[Picture]:
    """Histogram and map of every threshold, up to six to a sheet."""
    count = found.nominal.size
    sheets = -(-count // _MOST_IN_ROW)
    each = -(-count // sheets)
    limits = panels.signed_limits(found.departure)
    return [
        _threshold_sheet(found, range(start, min(start + each, count)), limits, each)
        for start in range(0, count, each)
    ]


def _threshold_sheet(
    found: Thresholds, chosen: range, limits: panels.Limits, columns: int
) -> Picture:
    shape = found.offset.shape[1:]
    wide = 11.0 / max(columns, 3)
    tall = min(5.0, max(0.7, (wide - 0.5) * shape[0] / shape[1]) + 0.7)
    sheet = Sheet(
        2.1 + tall, rows=2, columns=columns, row_heights=(1.6, tall),
        width=min(11.0, 0.8 + wide * columns),
    )  # fmt: skip
    half = _half_width(found)
    words = []
    for spare in range(len(chosen), columns):
        for axes in (sheet.axes[spare], sheet.axes[columns + spare]):
            axes.set_visible(False)
    maps = sheet.axes[columns : columns + len(chosen)]
    for place, k in enumerate(chosen):
        middle = float(found.mean[k])
        around = panels.Limits(middle - 1.15 * half, middle + 1.15 * half)
        _draw_offsets(sheet.axes[place], found, k, around)
        panels.draw_signed_map(
            maps[place],
            found.departure[k],
            label="keV from the average pixel",
            title=f"{fixed(middle, 2, sign=True)}, spread {fixed(found.spread[k], 2)}",
            limits=limits,
            bar_beside=maps if place == len(chosen) - 1 else [],
        )
        if place:
            sheet.axes[place].set_ylabel("")
            maps[place].set_ylabel("")
        words.append(
            f"{number(found.nominal[k])} keV: mean {fixed(middle, 2, sign=True)} keV, "
            f"spread {fixed(found.spread[k], 2)} keV"
        )
    return sheet.picture(
        alt=(
            "Histograms of true minus nominal threshold, above maps of each pixel's "
            f"departure from the average pixel. {listed(words)}."
        ),
        caption=(f"{_THRESHOLDS_NOTE} {panels.SIGNED_NOTE}{panels.block_note(shape)}"),
    )


def _half_width(found: Thresholds) -> float:
    """Half of a range in keV that holds nearly all departures of any threshold."""
    size = np.abs(found.departure[np.isfinite(found.departure)])
    return max(0.1, float(np.percentile(size, 99.8)) if size.size else 0.0)


def _draw_offsets(
    axes: Axes, found: Thresholds, threshold: int, limits: panels.Limits
) -> None:
    """Histogram of one threshold's true minus nominal energy."""
    panels.draw_histogram(
        axes,
        found.offset[threshold],
        label="true minus nominal (keV)",
        title=f"{threshold + 1}: set to {number(found.nominal[threshold])} keV",
        colour=rank_colours(found.nominal.size)[threshold],
        limits=limits,
        bins=32,
    )
    panels.line_over_bars(axes, float(found.mean[threshold]))
    axes.locator_params(nbins=4)


def residual_picture(calibration: Calibration) -> Picture:
    """Mean counts over expected counts of every step and bin, before and after."""
    steps = calibration.steps
    rows = steps.exposure.size
    sheet = Sheet(
        1.2 + 0.19 * max(8, min(rows, _MOST_NAMED_ROWS)),
        columns=3,
        column_widths=(1.0, 1.0, 1.0),
    )
    names = [
        f"{i}: {name}"
        for i, name in zip(steps.exposure, step_names(calibration), strict=True)
    ]
    before = residual_size(calibration, corrected=False)
    after = residual_size(calibration, corrected=True)
    sigmas = steps.residual / steps.error
    parts = (
        (100.0 * steps.physics_residual, "physics alone", "%", 2),
        (100.0 * steps.residual, "with the smooth correction", "%", 2),
        (sigmas, f"the same, in its counting error {SIGMA}", SIGMA, 1),
    )
    for i, (axes, (values, title, unit, places)) in enumerate(
        zip(sheet.axes, parts, strict=True)
    ):
        _residual_panel(axes, values, names if i == 0 else None, title, unit, places)
    row, column = np.unravel_index(int(np.abs(sigmas).argmax()), sigmas.shape)
    return sheet.picture(
        alt=(
            f"Residuals of {rows} exposures in {sigmas.shape[1]} bins. Physics alone: "
            f"{percent(before.share, 2)} root mean square. With the smooth correction: "
            f"{percent(after.share, 3)}, {fixed(after.sigmas, 2)} times the counting "
            f"error. Largest: exposure {names[row]}, bin {column + 1}, "
            f"{fixed(float(sigmas[row, column]), 1, sign=True)} {SIGMA}."
        ),
        caption=(
            "Mean counts of all good pixels over expected counts, minus 1. Rows are "
            "exposures (index: g/cm² of each material). A row that stands out is a "
            "step with a wrong label or a bad plate; a column is a threshold. "
            "Each panel's colours are symmetric about zero, which is dark."
        ),
    )


def _residual_panel(
    axes: Axes,
    values: NDArray[np.float64],
    names: list[str] | None,
    title: str,
    unit: str,
    places: int,
) -> None:
    rows, columns = values.shape
    top = max(float(np.abs(values).max()), 10.0**-places)
    axes.imshow(
        values, cmap=signed_scale(), norm=Normalize(-top, top), aspect="auto",
        interpolation="none",
    )  # fmt: skip
    axes.set_title(f"{title} ({unit})" if unit == "%" else title)
    axes.set_xticks(range(columns), [f"bin {b + 1}" for b in range(columns)])
    axes.tick_params(length=0)
    named = rows <= _MOST_NAMED_ROWS
    if names is not None and named:
        axes.set_yticks(range(rows), names)
    elif named:
        axes.set_yticks([])
    if not named:
        axes.set_ylabel("exposure, in order")
        return
    for r in range(rows):
        for b in range(columns):
            light = abs(values[r, b]) > 0.62 * top
            words = axes.text(
                b, r, fixed(float(values[r, b]), places, sign=True), ha="center",
                va="center", fontsize=7.0, color="#101418" if light else "#f4f4f0",
            )  # fmt: skip
            words.set_in_layout(False)


def reasons_picture(
    reasons: NDArray[np.uint16], *, title: str = "pixels by reason"
) -> Picture:
    """Which pixels are not used, and why."""
    sheet = Sheet(map_height(reasons.shape, 3) + 0.1, width=7.4)
    draw_reasons(sheet.axes[0], reasons, PIXEL_REASONS, title=title)
    found = [
        f"{r.name} {np.count_nonzero(reasons & r.bit)}"
        for r in PIXEL_REASONS
        if np.any(reasons & r.bit)
    ]
    return sheet.picture(
        alt=(
            f"Map of unfit pixels: {percent(float(np.mean(reasons == 0)))} are sound. "
            f"By reason: {listed(found) if found else 'none'}."
        ),
        caption=(
            "A pixel with several reasons shows the rarest of them."
            f"{rarest_note(reasons.shape)}"
        ),
    )


def pixels_picture(calibration: Calibration) -> Picture:
    """Maps of what else a pixel has of its own."""
    values = of_pixels(calibration)
    shape = calibration.shape
    sheet = Sheet(2 * map_height(shape, 3), rows=2, columns=2, width=9.4)
    panels.draw_signed_map(
        sheet.axes[0],
        values["area"],
        label="% from the average pixel",
        title="sensitive area",
    )
    words = [f"area spread {number(float(np.nanstd(values['area'])))} %"]
    rest = (
        ("deviance", "deviance of the pixel's fit", "per degree of freedom"),
        ("dead_time", "dead time", "ns"),
        ("noise", "electronic noise", "keV"),
    )
    for axes, (name, title, unit) in zip(sheet.axes[1:], rest, strict=True):
        panels.draw_map(
            axes,
            values[name],
            scale=amount_scale(),
            limits=panels.robust_limits(values[name]),
            label=unit,
            title=title,
        )
        words.append(f"{title} median {number(median(values[name]))} {unit}")
    return sheet.picture(
        alt=f"Four maps of the pixels: {listed(words)}.",
        caption=(
            f"{panels.LIMITS_NOTE} The area's colours are symmetric about zero. Dead "
            "time and noise are drawn towards the average pixel as far as the scan "
            f"says little about a pixel.{panels.block_note(shape)}"
        ),
    )


def deviance_histogram(calibration: Calibration) -> Picture:
    """Histogram of the pixels' deviances."""
    deviance = of_pixels(calibration)["deviance"]
    freedom = calibration.steps.residual.size
    sheet = Sheet(2.5, width=6.2)
    axes = sheet.axes[0]
    panels.draw_histogram(
        axes,
        deviance,
        label="deviance per degree of freedom",
        title="how well each pixel's counts are met",
        colour=MUTED,
    )
    wide = float(np.sqrt(2.0 / freedom))
    panels.mark_value(axes, 1.0, "counting alone")
    return sheet.picture(
        alt=(
            "Histogram of the deviance per degree of freedom of the pixels, median "
            f"{number(median(deviance))}; counting alone gives 1 with a spread of "
            f"{number(wide, 2)}."
        ),
        caption=(
            f"{freedom} numbers a pixel ({calibration.steps.exposure.size} exposures): "
            f"counting alone gives 1 with a spread of {number(wide, 2)}, a little less "
            "where the pixel's own unknowns take up data."
        ),
    )
