"""Tables about maps, and the figures that stand in them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting.maps_pictures import FLAG_REASONS
from spectral.reporting.maps_summary import median, middle_range
from spectral.reporting.page import Table
from spectral.reporting.reason_map import reason_colour
from spectral.reporting.wording import (
    GRAMS,
    NONE,
    beside,
    fixed,
    listed,
    number,
    percent,
)

if TYPE_CHECKING:
    from spectral.reporting.maps_summary import MapsSummary

FEWEST_REPEATS = 4


def scatter_ratio(summary: MapsSummary, index: int) -> float:
    """Scatter between exposures over reported error, pooled over the pixels.

    The mean of the squares of both: with few repeats the median ratio of one pixel
    is biased low, the ratio of mean squares is not.
    """
    scatter, error = summary.scatter[index], summary.single_error[index]
    good = np.isfinite(scatter) & np.isfinite(error) & (summary.flags == 0)
    if len(summary.exposure) < FEWEST_REPEATS or not good.any():
        return float("nan")
    ratio = (scatter[good] / error[good]) ** 2
    return float(np.sqrt(ratio.mean()))


def numbers_table(summary: MapsSummary) -> Table:
    """Areal densities and their errors, a row for each material."""
    repeats_there = len(summary.exposure) > 1
    rows = []
    for i, name in enumerate(summary.material):
        single = median(summary.single_error[i])
        share = median(summary.calibration_error[i])
        low, high = middle_range(summary.density[i])
        repeats = (single / share) ** 2 if share > 0 else float("inf")
        rows.append(
            (
                name,
                beside(median(summary.density[i]), single),
                beside(low, single),
                beside(high, single),
                number(single),
                *([number(median(summary.mean_error[i]))] if repeats_there else []),
                number(share),
                number(repeats, 2) if np.isfinite(repeats) else NONE,
                str(int(np.count_nonzero(summary.estimates[i]))),
            )
        )
    return Table(
        caption=f"Over the pixels, in {GRAMS}; errors: one standard deviation, median",
        header=(
            "material",
            "median",
            "5th percentile",
            "95th percentile",
            "error of one exposure",
            *(
                [f"error of the mean of {len(summary.exposure)}"]
                if repeats_there
                else []
            ),
            "error from the calibration",
            "exposures at which both are equal",
            "pixels with a value",
        ),
        rows=rows,
    )


def correlation_text(summary: MapsSummary) -> list[str]:
    """How the errors of two materials go together; nothing for one material."""
    m = len(summary.material)
    pairs = [
        f"{summary.material[i]} and {summary.material[j]} "
        f"{fixed(float(summary.correlation[i, j]), 2, sign=True)}"
        for i in range(m)
        for j in range(i + 1, m)
    ]
    if not pairs:
        return []
    text = (
        f"Correlation of the errors of two materials in one pixel: {listed(pairs)}. "
        "An error in one is answered by the other; a sum that the beam sees, like the "
        "total attenuation, is known better than its parts."
    )
    return [text]


def flags_table(summary: MapsSummary) -> Table:
    """How many pixels and estimates each flag takes."""
    estimates = summary.flags.size * len(summary.exposure)
    rows, colours = [], []
    for flag, reason in zip(summary.flagged_estimates, FLAG_REASONS, strict=True):
        many = summary.flagged_estimates[flag]
        pixels = int(np.count_nonzero(summary.flags & reason.bit))
        colours.append(reason_colour(FLAG_REASONS, reason))
        rows.append(
            (
                reason.name,
                reason.meaning,
                str(pixels),
                str(many),
                percent(many / estimates, 2),
            )
        )
    return Table(
        caption="Flags and their reasons",
        header=(
            "flag",
            "what it says",
            "pixels, in any exposure",
            "estimates",
            "share of the estimates",
        ),
        rows=rows,
        words=frozenset({1}),
        swatches=colours,
    )


def scatter_table(summary: MapsSummary) -> Table:
    """Scatter between exposures beside the reported error."""
    rows = [
        (
            name,
            number(median(summary.scatter[i])),
            number(median(summary.single_error[i])),
            fixed(scatter_ratio(summary, i), 3),
        )
        for i, name in enumerate(summary.material)
    ]
    return Table(
        caption=(
            "If the exposures are repeats of one object, scatter over error is near 1"
        ),
        header=(
            "material",
            f"scatter between exposures, median ({GRAMS})",
            f"reported error, median ({GRAMS})",
            "scatter over error, unflagged pixels",
        ),
        rows=rows,
    )
