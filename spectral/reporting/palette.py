"""Colours of pictures and page, on light paper and on dark."""

from __future__ import annotations

from typing import TYPE_CHECKING

import matplotlib as mpl
from matplotlib.colors import Colormap, LinearSegmentedColormap, to_hex

if TYPE_CHECKING:
    from collections.abc import Iterator

#: What a colour is for: its value on light paper and on dark.
INK = "#1d2733"
MUTED = "#566270"
GRID = "#d3d9de"
ACCENT = "#b3420e"
STANDBY = "#9aa5af"
PAPER_NAMES: dict[str, tuple[str, str]] = {
    "ink": (INK, "#e7e9ec"),
    "muted": (MUTED, "#a7b0b9"),
    "grid": (GRID, "#3a434d"),
    "accent": (ACCENT, "#ff9c66"),
    "standby": (STANDBY, "#6f7a85"),
}
#: Materials: apart in lightness as well as in hue.
MATERIAL_NAMES: tuple[tuple[str, str], ...] = (
    ("#0b5f7a", "#5cc4e4"),
    ("#c2610c", "#f2a65a"),
    ("#6b2d75", "#d59be0"),
    ("#4c6b12", "#b5d46a"),
)
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<")
#: Reasons not to trust a pixel, and `SOUND` where there is none. A map's colours
#: stay as they are on dark paper, so none of them may be a colour that changes.
SOUND = "#dfe4e7"
REASON_COLOURS = (
    "#1b2530",
    "#c4600a",
    "#3f8fc4",
    "#e8c33c",
    "#7c2f8a",
    "#58bd98",
    "#b0306a",
    "#8a5a2b",
    "#6b7fd1",
)
#: A place without a value, on every colour scale below.
NO_VALUE = "#ffffff"
_RANK_SPAN_LIGHT = (0.0, 0.80)
_RANK_SPAN_DARK = (0.38, 1.0)

#: Lightness rises evenly (CIELAB 16 to 82) from the middle to both ends, so that
#: neither sign looks larger; blue and orange stay apart for every common kind of
#: colour blindness.
_SIGNED_STOPS = (
    "#9dd2ff",
    "#74b4e7",
    "#4698cf",
    "#357aa8",
    "#375d7a",
    "#32424f",
    "#282828",
    "#523b2c",
    "#7c4f2e",
    "#a8642f",
    "#cf7c3e",
    "#eb9c63",
    "#ffbc89",
)


def amount_scale() -> Colormap:
    """Colours for amounts: lightness rises evenly with the value."""
    return _with_no_value(mpl.colormaps["viridis"])


def error_scale() -> Colormap:
    """Colours for errors, told apart from amounts at a glance."""
    return _with_no_value(mpl.colormaps["cividis"])


def signed_scale() -> Colormap:
    """Colours for signed quantities: darkest at zero, light at both ends."""
    return _with_no_value(
        LinearSegmentedColormap.from_list("signed", _SIGNED_STOPS, N=255)
    )


def _with_no_value(scale: Colormap) -> Colormap:
    return scale.with_extremes(bad=NO_VALUE)


def rank_colours(count: int) -> tuple[str, ...]:
    """Colours of things in an order (thresholds, bins), lowest first."""
    return tuple(light for light, _ in _ranks(count))


def material_colour(index: int) -> str:
    """Colour of a material by its place."""
    return MATERIAL_NAMES[index % len(MATERIAL_NAMES)][0]


def marker(index: int) -> str:
    """Marker that goes with a colour, for readers who cannot tell it."""
    return MARKERS[index % len(MARKERS)]


def _ranks(count: int) -> Iterator[tuple[str, str]]:
    scale = mpl.colormaps["viridis"]
    for i in range(count):
        share = 0.0 if count == 1 else i / (count - 1)
        light, dark = (
            to_hex(scale(low + share * (high - low)))
            for low, high in (_RANK_SPAN_LIGHT, _RANK_SPAN_DARK)
        )
        yield _neighbour(light), dark


def _neighbour(colour: str) -> str:
    """The next blue: no colour of a scale must change with the paper."""
    return f"{colour[:-2]}{int(colour[-2:], 16) ^ 1:02x}"


def dark_variables(ranks: int = 8) -> dict[str, tuple[str, str]]:
    """CSS variable of every colour that changes with the paper, by light value.

    Returns
    -------
    dict of light colour to (variable, dark colour)
    """
    found = {light: (f"--{name}", dark) for name, (light, dark) in PAPER_NAMES.items()}
    for i, (light, dark) in enumerate(MATERIAL_NAMES):
        found[light] = (f"--m{i}", dark)
    for count in range(1, ranks + 1):
        for i, (light, dark) in enumerate(_ranks(count)):
            found.setdefault(light, (f"--r{count}{i}", dark))
    return found
