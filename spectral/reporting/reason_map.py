"""Maps of the reasons not to trust a pixel."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.patches import Patch

from spectral.reporting import panels
from spectral.reporting.palette import MUTED, REASON_COLOURS, SOUND

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.axes import Axes
    from matplotlib.legend import Legend
    from numpy.typing import NDArray


def rarest_note(shape: tuple[int, ...]) -> str:
    """What a point of a map of reasons stands for, if not for one pixel."""
    size = panels.block_size(shape)
    if size == 1:
        return ""
    return (
        f" Each point of the picture stands for {size} by {size} pixels and shows the "
        "rarest reason in it."
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Reason:
    """One reason not to trust pixels.

    Attributes
    ----------
    bit : int
    name : str
        Short, as a person reads it.
    meaning : str
        A full clause.
    """

    bit: int
    name: str
    meaning: str


def draw_reasons(
    axes: Axes, flags: NDArray[np.integer], reasons: Sequence[Reason], *, title: str
) -> Legend:
    """Map of the reasons; a pixel with several shows its rarest.

    A rare reason would vanish under a common one, and is what one must not miss.
    """
    counts = {r.bit: int(np.count_nonzero(flags & r.bit)) for r in reasons}
    shown = [r for r in reasons if counts[r.bit]]
    place = np.zeros(flags.shape, np.int64)
    for reason in sorted(shown, key=lambda r: -counts[r.bit]):
        place[flags & reason.bit != 0] = 1 + shown.index(reason)
    colours = [SOUND, *(reason_colour(reasons, r) for r in shown)]
    y, x = flags.shape
    axes.imshow(
        _block_rarest(place, panels.block_size(flags.shape)),
        cmap=ListedColormap(colours),
        norm=BoundaryNorm(np.arange(len(colours) + 1) - 0.5, len(colours)),
        interpolation="none",
        extent=(-0.5, x - 0.5, y - 0.5, -0.5),
    )
    panels.frame(axes, title)
    if not panels.is_flat(axes):
        axes.set_anchor("NW")
    words = ["sound", *(f"{r.name} ({counts[r.bit]})" for r in shown)]
    sound = int(np.count_nonzero(flags == 0))
    words[0] = f"sound ({sound})"
    patches = [
        Patch(facecolor=c, edgecolor=MUTED, linewidth=0.6, label=w)
        for c, w in zip(colours, words, strict=True)
    ]
    return axes.legend(
        handles=patches,
        loc="upper left",
        bbox_to_anchor=(1.02, 1.0),
        borderaxespad=0.0,
        title="pixels",
        alignment="left",
        title_fontsize=8.0,
    )


def reason_colour(reasons: Sequence[Reason], reason: Reason) -> str:
    """The colour that a reason keeps on every page."""
    return REASON_COLOURS[list(reasons).index(reason) % len(REASON_COLOURS)]


def _block_rarest(place: NDArray[np.int64], size: int) -> NDArray[np.int64]:
    """In each block the reason that is rarest in the whole map, if any."""
    if size == 1:
        return place
    numbers, counts = np.unique(place, return_counts=True)
    rank = np.zeros(int(place.max()) + 1)
    order = numbers[np.argsort(-counts, kind="stable")]
    order = np.concatenate([[0], order[order != 0]])
    rank[order] = np.arange(order.size)
    blocks = np.nan_to_num(panels.blocks_of(rank[place], size), nan=0.0)
    return np.asarray(order[blocks.max(-1).astype(np.int64)])
