"""A figure drawn without any screen, as a picture that a page can hold."""

from __future__ import annotations

import base64
import io
import re
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from PIL import Image

from spectral.reporting.palette import GRID, INK, MUTED, dark_variables

if TYPE_CHECKING:
    from collections.abc import Iterator

    from matplotlib.axes import Axes

PIXELS_PER_INCH = 96
FULL_WIDTH_INCHES = 11.0
_STYLE: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "wedgewright",
    "svg.id": None,
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Verdana", "Arial"],
    "font.size": 9.0,
    "axes.titlesize": 9.5,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.edgecolor": MUTED,
    "axes.labelcolor": INK,
    "axes.titlecolor": INK,
    "axes.linewidth": 0.8,
    "axes.facecolor": "none",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": False,
    "axes.formatter.use_mathtext": False,
    "axes.formatter.useoffset": False,
    "axes.unicode_minus": True,
    "grid.color": GRID,
    "grid.linewidth": 0.7,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "text.color": INK,
    "legend.frameon": False,
    "legend.fontsize": 8.0,
    "figure.facecolor": "none",
    "savefig.facecolor": "none",
    "lines.linewidth": 1.6,
    "lines.markersize": 4.5,
}
_FONTS = "'DejaVu Sans',Verdana,Arial,sans-serif"
_PALETTE_SIZE = 256


@contextmanager
def page_style() -> Iterator[None]:
    """Draw in the page's style within this block; the caller's comes back after it."""
    with mpl.rc_context(_STYLE):
        yield


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """A drawn figure with its words.

    Attributes
    ----------
    uri : str
        ``data:`` address of an SVG image.
    width, height : int
        In CSS pixels.
    alt : str
        What a reader who cannot see it must know.
    caption : str
    """

    uri: str
    width: int
    height: int
    alt: str
    caption: str


class Sheet:
    """A figure to draw on; `picture` turns it into a `Picture`.

    Parameters
    ----------
    height : float
        In inches.
    rows, columns : int
        Layout of its axes.
    width : float
        In inches.
    row_heights, column_widths : sequences of float, optional
        Relative sizes.
    """

    def __init__(
        self,
        height: float,
        *,
        rows: int = 1,
        columns: int = 1,
        width: float = FULL_WIDTH_INCHES,
        row_heights: tuple[float, ...] | None = None,
        column_widths: tuple[float, ...] | None = None,
    ) -> None:
        with page_style():
            self.figure = Figure(figsize=(width, height), layout="constrained")
            FigureCanvasAgg(self.figure)
            grid = self.figure.subplots(
                rows,
                columns,
                squeeze=False,
                gridspec_kw={
                    "height_ratios": row_heights,
                    "width_ratios": column_widths,
                },
            )
        self.axes: list[Axes] = list(grid.ravel())

    def picture(self, *, alt: str, caption: str) -> Picture:
        """The finished drawing."""
        return as_picture(self.figure, alt=alt, caption=caption)


def as_picture(figure: Figure, *, alt: str, caption: str) -> Picture:
    """Picture of a figure, as SVG that follows light and dark paper."""
    stream = io.StringIO()
    nothing = dict.fromkeys(("Creator", "Date", "Format", "Type"))
    with page_style():
        figure.savefig(stream, format="svg", metadata=nothing)
    width, height = figure.get_size_inches() * PIXELS_PER_INCH
    return Picture(
        uri=svg_uri(compact_svg(stream.getvalue())),
        width=round(width),
        height=round(height),
        alt=alt,
        caption=caption,
    )


def compact_svg(text: str) -> str:
    """SVG without preamble, with smaller rasters and colours that follow the paper."""
    text = text[text.index("<svg") :]
    text = re.sub(r"<!--.*?-->", "", text, flags=re.DOTALL)
    text = re.sub(r"\s*\n\s*", " ", text)
    text = re.sub(r"> +<", "><", text)
    text = re.sub(r' xmlns:xlink="[^"]*"', "", text).replace("xlink:href", "href")
    text = _without_repetition(text)
    text = re.sub(
        r"data:image/png;base64,([A-Za-z0-9+/=\s]+)",
        lambda found: _smaller_png(found.group(1)),
        text,
    )
    used: dict[str, str] = {}

    def named(found: re.Match[str]) -> str:
        colour = found.group(0).lower()
        if colour not in variables:
            return colour
        name, dark = variables[colour]
        used[name] = dark
        return f"var({name},{colour})"

    variables = dark_variables()
    text = re.sub(r"(?<=[: ])#[0-9a-fA-F]{6}(?=[;\"' ])", named, text)
    rules = ";".join(f"{name}:{dark}" for name, dark in sorted(used.items()))
    style = (
        f"<style>text{{font-family:{_FONTS}}}"
        f"@media (prefers-color-scheme:dark){{svg{{{rules}}}}}</style>"
    )
    start = text.index(">", text.index("<svg")) + 1
    return text[:start] + style + text[start:]


def _without_repetition(text: str) -> str:
    """SVG without what says nothing: fonts named again, turns by zero, names."""
    text = re.sub(r"font-family:[^;\"]*;? ?", "", text)
    text = re.sub(r' transform="rotate\(-?0 [^)]*\)"', "", text)
    text = re.sub(r'<g id="[^"]*"', "<g", text)
    text = re.sub(r"<g/>", "", text)
    text = re.sub(r' id="image[^"]*"', "", text)

    def rounded(found: re.Match[str]) -> str:
        return re.sub(
            r"-?\d+\.\d{3,}", lambda n: f"{float(n.group(0)):.2f}", found.group(0)
        )

    return re.sub(r' (?:d|x|y|points)="[^"]*"', rounded, text)


def _smaller_png(encoded: str) -> str:
    """The same image with a colour table, where its colours are few enough."""
    data = base64.b64decode(encoded)
    with Image.open(io.BytesIO(data)) as image:
        pixels = np.asarray(image.convert("RGBA"))
    flat = np.ascontiguousarray(pixels).view(np.uint32).reshape(pixels.shape[:2])
    colours, index = np.unique(flat, return_inverse=True)
    if colours.size <= _PALETTE_SIZE:
        table = colours.view(np.uint8).reshape(-1, 4)
        small = Image.fromarray(index.reshape(flat.shape).astype(np.uint8), mode=None)
        small = small.convert("P")
        small.putpalette(table[:, :3].tobytes(), "RGB")
        stream = io.BytesIO()
        small.save(stream, "PNG", optimize=True, transparency=table[:, 3].tobytes())
        data = min(data, stream.getvalue(), key=len)
    return "data:image/png;base64," + base64.b64encode(data).decode("ascii")


def svg_uri(text: str) -> str:
    """Data address of an SVG; no address of the outside stays readable in it."""
    return "data:image/svg+xml," + quote(text, safe=" ,;=/()'{}+*!-._~")
