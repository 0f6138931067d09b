"""Panels that pages share: maps of pixels, histograms, maps of reasons."""

from __future__ import annotations

import math
import textwrap
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from matplotlib import patheffects
from matplotlib.colors import Normalize
from matplotlib.patches import Patch

from spectral.reporting.palette import (
    ACCENT,
    GRID,
    INK,
    MUTED,
    NO_VALUE,
    signed_scale,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.axes import Axes
    from matplotlib.colors import Colormap
    from matplotlib.figure import Figure
    from numpy.typing import NDArray

MOST_POINTS = 192 * 192
_FLAT = 8
OUTLINE = "#14181d"
_NARROW_TITLE = 18
_LOW_PERCENT, _HIGH_PERCENT = 1.0, 99.0
LIMITS_NOTE = (
    "Colours span the 1st to the 99th percentile of the pixels; arrowed ends of the "
    "scale hold what lies beyond."
)
SIGNED_NOTE = (
    "Colours reach the 99th percentile of the size on both sides of zero; zero is dark."
)


@dataclass(frozen=True, slots=True)
class Limits:
    """Ends of a colour scale."""

    low: float
    high: float


def robust_limits(values: NDArray[np.floating]) -> Limits:
    """First and ninety-ninth percentile of the finite values; never equal."""
    finite = values[np.isfinite(values)]
    if finite.size == 0:
        return Limits(0.0, 1.0)
    low, high = (float(v) for v in np.percentile(finite, [_LOW_PERCENT, _HIGH_PERCENT]))
    if high - low < 1e-9 * max(abs(high), abs(low), 1e-12):
        if high == 0.0 and finite.min() == 0.0:  # nothing, but for a few that show
            return Limits(0.0, float(np.min(finite[finite > 0.0], initial=1.0)))
        half = 0.01 * abs(high) if high else 0.5
        return Limits(low - half, high + half)
    return Limits(low, high)


def signed_limits(values: NDArray[np.floating]) -> Limits:
    """Limits symmetric about zero: the 99th percentile of the absolute value."""
    finite = np.abs(values[np.isfinite(values)])
    top = float(np.percentile(finite, _HIGH_PERCENT)) if finite.size else 1.0
    top = top if top > 0.0 else 1.0
    return Limits(-top, top)


def block_size(shape: tuple[int, ...]) -> int:
    """Pixels along each side of the blocks that a picture can show."""
    return max(1, math.ceil(math.sqrt(math.prod(shape) / MOST_POINTS)))


def block_note(shape: tuple[int, ...]) -> str:
    """What a point of the picture stands for, if not for one pixel."""
    size = block_size(shape)
    if size == 1:
        return ""
    return f" Each point of the picture is the median of {size} by {size} pixels."


def block_median(image: NDArray[np.floating]) -> NDArray[np.float64]:
    """Median of the finite values in each block; NaN where fewer than half are."""
    size = block_size(image.shape)
    values = np.asarray(image, np.float64)
    if size == 1:
        return values
    blocks = blocks_of(values, size)
    finite = np.isfinite(blocks)
    enough = 2 * finite.sum(-1) >= blocks.shape[-1]
    blocks[~enough] = 0.0
    return np.where(enough, np.nanmedian(blocks, axis=-1), np.nan)


def blocks_of(values: NDArray[np.float64], size: int) -> NDArray[np.float64]:
    """Blocks of an image, shape (row, column, size * size); edges filled with NaN."""
    y, x = values.shape
    rows, columns = -(-y // size), -(-x // size)
    full = np.full((rows * size, columns * size), np.nan)
    full[:y, :x] = values
    parts = full.reshape(rows, size, columns, size).transpose(0, 2, 1, 3)
    return parts.reshape(rows, columns, size * size).copy()


def draw_map(
    axes: Axes,
    image: NDArray[np.floating],
    *,
    scale: Colormap,
    limits: Limits,
    label: str,
    title: str,
    bar_beside: Sequence[Axes] | None = None,
) -> None:
    """One map with its colour bar.

    Parameters
    ----------
    axes : Axes
    image : array, shape (row, column)
        NaN where there is no value.
    scale : Colormap
    limits : Limits
    label : str
        Quantity and unit, beside the colour bar.
    title : str
    bar_beside : sequence of Axes, optional
        Maps that share the bar; none for no bar here.
    """
    y, x = image.shape
    picture = block_median(image)
    shown = axes.imshow(
        picture,
        cmap=scale,
        norm=Normalize(limits.low, limits.high),
        interpolation="none",
        extent=(-0.5, x - 0.5, y - 0.5, -0.5),
    )
    frame(axes, textwrap.fill(title, _NARROW_TITLE) if y > 2 * x else title)
    figure = _figure(axes)
    if not np.isfinite(picture).all() and not figure.legends:
        figure.legend(handles=[no_value_patch()], loc="outside lower left")
    if bar_beside is not None and len(bar_beside) == 0:
        return
    finite = image[np.isfinite(image)]
    below = bool(finite.size and finite.min() < limits.low)
    above = bool(finite.size and finite.max() > limits.high)
    extend = {
        (False, False): "neither",
        (True, False): "min",
        (False, True): "max",
        (True, True): "both",
    }[below, above]
    wide = x >= 2 * y
    bar = figure.colorbar(
        shown,
        ax=[axes] if bar_beside is None else list(bar_beside),
        extend=extend,
        location="bottom" if wide else "right",
        fraction=0.05,
        pad=0.03,
        aspect=30 if wide else 22 * min(max(1.0, y / x), 2.0),
    )
    bar.set_label(label)
    bar.outline.set_linewidth(0.6)
    bar.ax.tick_params(width=0.6)


def _figure(axes: Axes) -> Figure:
    figure = axes.get_figure(root=True)
    if figure is None:  # an Axes without a figure cannot be drawn on
        raise AssertionError
    return figure


def frame(axes: Axes, title: str) -> None:
    """Outline and axes of a map."""
    axes.set_title(title)
    for spine in axes.spines.values():
        spine.set_visible(True)
        spine.set_color(MUTED)
        spine.set_linewidth(0.6)
    axes.set_xlabel("column (pixel)")
    axes.set_ylabel("row (pixel)")
    axes.locator_params(nbins=4, integer=True, min_n_ticks=1)
    if is_flat(axes):
        axes.set_aspect("auto")
    axes.set_anchor("W")


def is_flat(axes: Axes) -> bool:
    """Whether a map is a line rather than a field: pixels are then not square."""
    wide, high = abs(np.diff(axes.get_xlim())[0]), abs(np.diff(axes.get_ylim())[0])
    return bool(wide > _FLAT * high or high > _FLAT * wide)


def draw_signed_map(
    axes: Axes,
    image: NDArray[np.floating],
    *,
    label: str,
    title: str,
    limits: Limits | None = None,
    bar_beside: Sequence[Axes] | None = None,
) -> None:
    """One map of a signed quantity, dark at zero."""
    draw_map(
        axes,
        image,
        scale=signed_scale(),
        limits=signed_limits(image) if limits is None else limits,
        label=label,
        title=title,
        bar_beside=bar_beside,
    )


def draw_histogram(
    axes: Axes,
    values: NDArray[np.floating],
    *,
    label: str,
    title: str,
    colour: str = MUTED,
    limits: Limits | None = None,
    bins: int = 48,
) -> None:
    """Histogram of the finite values; what lies beyond the limits is counted.

    Ends are the percentiles 0.2 and 99.8, widened by a tenth, unless given.
    """
    finite = np.asarray(values[np.isfinite(values)], np.float64)
    if limits is None:
        limits = _histogram_limits(finite)
    edges = np.linspace(limits.low, limits.high, bins + 1)
    heights, _ = np.histogram(finite, edges)
    axes.stairs(heights, edges, fill=True, color=colour, alpha=0.85)
    axes.set_title(title)
    axes.set_xlabel(label)
    axes.set_ylabel("pixels")
    axes.set_xlim(limits.low, limits.high)
    axes.set_ylim(0.0, 1.06 * max(float(heights.max()), 1.0))
    outside = int(np.count_nonzero((finite < limits.low) | (finite > limits.high)))
    if outside:
        axes.set_ylim(0.0, 1.25 * max(float(heights.max()), 1.0))
        note(axes, f"{outside} outside this range")


def _histogram_limits(finite: NDArray[np.float64]) -> Limits:
    if finite.size == 0:
        return Limits(0.0, 1.0)
    low, high = (float(v) for v in np.percentile(finite, [0.2, 99.8]))
    margin = 0.1 * (high - low) or 0.1 * max(abs(high), 1.0)
    return Limits(low - margin, high + margin)


def note(axes: Axes, text: str, *, height: float = 0.98) -> None:
    """A small remark at the right side of a panel, in the upper corner by default."""
    axes.text(
        0.99,
        height,
        text,
        transform=axes.transAxes,
        ha="right",
        va="top",
        fontsize=7.5,
        color=MUTED,
    )


def name_place(axes: Axes, x: float, y: float, text: str) -> None:
    """Words on a map, to be read on dark and on bright colours."""
    axes.text(
        x, y, text, color="white", ha="center", va="center", fontsize=8.5,
        path_effects=[patheffects.withStroke(linewidth=2.2, foreground=OUTLINE)],
    )  # fmt: skip


def mark_row(axes: Axes, row: int) -> None:
    """Arrowheads at both sides of a map, at a row."""
    left, right = axes.get_xlim()
    for place, shape in ((left, 5), (right, 4)):  # carets that point inwards
        axes.plot(
            place, row, marker=shape, markersize=6.0, color=ACCENT, linestyle="none",
            clip_on=False, zorder=5,
        )  # fmt: skip


def line_over_bars(axes: Axes, value: float, *, middle: bool = True) -> None:
    """A vertical line as high as a histogram's bars: a remark may stand above them."""
    top = 0.8 if axes.texts else 1.0
    if middle:
        axes.axvline(value, ymax=top, color=INK, linewidth=1.0)
    else:
        axes.axvline(value, ymax=top, color=MUTED, linewidth=0.8, linestyle=":")


def mark_value(axes: Axes, value: float, text: str) -> None:
    """A vertical line at a value, named above the panel."""
    axes.axvline(value, color=ACCENT, linewidth=1.2)
    axes.annotate(
        text,
        (value, 1.0),
        xycoords=("data", "axes fraction"),
        xytext=(3, -3),
        textcoords="offset points",
        va="top",
        fontsize=7.5,
        color=ACCENT,
    )


def axis_words(axes: Axes, *, x: str, y: str, title: str = "") -> None:
    """Label both axes, name the panel, and draw the grid."""
    axes.set_xlabel(x)
    axes.set_ylabel(y)
    axes.set_title(title)
    light_grid(axes)


def light_grid(axes: Axes) -> None:
    """Grid lines behind the data."""
    axes.grid(visible=True, color=GRID, linewidth=0.7)
    axes.set_axisbelow(True)


def no_value_patch() -> Patch:
    """Legend entry for places without a value."""
    return Patch(facecolor=NO_VALUE, edgecolor=MUTED, linewidth=0.6, label="no value")
