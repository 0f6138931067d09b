"""Picture of the fixed pattern against the exposure of the wedge scan."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from spectral.reporting.drawing import page_style
from spectral.reporting.palette import MARKERS, MATERIAL_NAMES, MUTED

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from matplotlib.axes import Axes
    from numpy.typing import NDArray

    from tests.benchmarks.fixed_pattern import Curve


def draw(
    curves: Sequence[Curve],
    promised: NDArray[np.float64],
    names: Sequence[str],
    path: Path,
) -> None:
    """Write a picture of one panel a material.

    Parameters
    ----------
    curves : sequence of Curve
    promised : array, shape (case, material)
    names : sequence of str
        Of the materials.
    path : Path
    """
    with page_style():
        figure = Figure(figsize=(5.2 * len(names), 4.4), layout="constrained")
        figure.set_facecolor("white")
        FigureCanvasAgg(figure)
        panels = figure.subplots(1, len(names), sharey=True, squeeze=False)[0]
        for m, (axes, name) in enumerate(zip(panels, names, strict=True)):
            _panel(axes, curves, promised[:, m], m)
            axes.set_title(name)
            axes.set_xlabel("exposure of a wedge step (1: 20 000 counts in the open)")
        panels[0].set_ylabel("fixed pattern / error of one pixel in one exposure")
        panels[-1].legend(loc="upper right")
        figure.savefig(path, dpi=120)


def _panel(
    axes: Axes, curves: Sequence[Curve], promised: NDArray[np.float64], m: int
) -> None:
    """Both curves of a material; law, square root and floor of the last."""
    axes.set_xscale("log", base=2)
    axes.set_yscale("log")
    for curve, colours, marker in zip(curves, MATERIAL_NAMES, MARKERS, strict=False):
        axes.errorbar(
            curve.exposure, curve.found[:, m], curve.error[:, m], marker=marker,
            color=colours[0], linestyle="none", label=curve.label,
        )  # fmt: skip
    # the law holds for the wedge scan alone: the last curve
    floor, part = np.sqrt(curves[-1].law()[:, m])
    fine = np.geomspace(curves[-1].exposure.min(), curves[-1].exposure.max(), 100)
    root, colour = part / np.sqrt(fine), MATERIAL_NAMES[len(curves) - 1][0]
    axes.plot(fine, np.hypot(floor, root), color=colour, lw=1)
    axes.plot(fine, root, color=MUTED, ls=":", label="square root of exposure")
    axes.axhline(floor, color=colour, ls="--", lw=1, label="fitted floor")
    axes.plot(
        curves[0].exposure, promised, color=MUTED, marker="x", ls="none",
        label="promised by the calibration",
    )  # fmt: skip
    exposures = curves[0].exposure
    axes.set_xticks(exposures, [f"{e:g}" for e in exposures])
    axes.minorticks_off()
    ticks = [0.02, 0.05, 0.1, 0.2, 0.5]
    axes.set_yticks(ticks, [f"{t:g}" for t in ticks])
    axes.grid(visible=True, which="major")
