"""The page about maps: how much of each material, how sure, and where not."""

from __future__ import annotations

from pathlib import PurePath
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from spectral.errors import InputError
from spectral.reporting import maps_pictures as pictures
from spectral.reporting.maps_blocks import IN_MEMORY
from spectral.reporting.maps_record import (
    numbers_in,
    record_table,
    sources_and_assumptions,
)
from spectral.reporting.maps_summary import MapsSummary, median, middle_range, summarise
from spectral.reporting.maps_tables import (
    FEWEST_REPEATS,
    correlation_text,
    flags_table,
    numbers_table,
    scatter_ratio,
    scatter_table,
)
from spectral.reporting.page import KeyFigure, Page, Section, Table
from spectral.reporting.wording import (
    GRAMS,
    beside,
    count,
    fixed,
    listed,
    number,
    percent,
    with_error,
)

if TYPE_CHECKING:
    from spectral.reporting.drawing import Picture
    from spectral.reporting.maps_blocks import MapsBlocks

_ODD_SCATTER = 0.1
_ODD_DEVIANCE = 1.25
_ODD_OPEN = 0.01
_FLAGGED_MUCH = 0.05


def maps_page(blocks: MapsBlocks, *, row: int | None = None) -> Page:
    """The page about maps.

    Parameters
    ----------
    blocks : MapsBlocks
    row : int, optional
        Row of the profile; the middle one by default.

    Raises
    ------
    InputError
        If there is no such row.
    """
    summary = summarise(blocks)
    rows, columns = summary.flags.shape
    row = rows // 2 if row is None else row
    if not 0 <= row < rows:
        msg = f"row {row} is not in the maps, which have rows 0 to {rows - 1}"
        raise InputError(msg)
    freedom = degrees_of_freedom(summary)
    record, assumed = sources_and_assumptions(summary)
    return Page(
        kind=(
            f"Areal-density maps, {rows} by {columns} pixels, "
            f"{count(len(summary.exposure), 'exposure')}"
        ),
        title=_title(summary, blocks.name),
        said=_said(summary),
        look=_look(summary, freedom),
        figures=_key_figures(summary, freedom),
        sections=_sections(summary, row, freedom),
        assumed=assumed,
        record=[("maps", blocks.name), *record],
    )


def degrees_of_freedom(summary: MapsSummary) -> int | None:
    """Bins minus materials, where the record says how many bins there were."""
    bins = summary.process.get("bins", "")
    if not bins.isdigit() or int(bins) <= len(summary.material):
        return None
    return int(bins) - len(summary.material)


def _title(summary: MapsSummary, name: str) -> str:
    scan = summary.process.get("scan", "")
    of = listed(summary.material)
    where = PurePath(scan or name).name
    if not scan and name == IN_MEMORY:
        return of
    if len(summary.exposure) == 1:
        return f"{of} in exposure {summary.exposure[0]} of {where}"
    return f"{of} in {where}"


def _said(summary: MapsSummary) -> list[str]:
    said = []
    for i, name in enumerate(summary.material):
        density = summary.density[i]
        single = median(summary.single_error[i])
        share = median(summary.calibration_error[i])
        low, high = middle_range(density)
        if not np.isfinite(low):
            said.append(f"{name}: no pixel has a value.")
            continue
        said.append(
            f"{name}: {beside(median(density), single)} {GRAMS} in the median pixel, "
            f"{beside(low, single)} to {beside(high, single)} in nine pixels of ten. "
            f"One exposure "
            f"knows a pixel to {number(single, 2)} {GRAMS}; the calibration adds "
            f"{number(share, 2)} {GRAMS}, which repeats do not remove."
        )
    flagged = np.count_nonzero(summary.flags)
    if flagged:
        reasons = sorted(
            (
                (int(np.count_nonzero(summary.flags & r.bit)), r.name)
                for r in pictures.FLAG_REASONS
            ),
            reverse=True,
        )
        most = [f"{name} ({n})" for n, name in reasons if n][:4]
        said.append(
            f"{percent(summary.sound_share)} of the pixels carry no flag; "
            f"{count(int(flagged), 'pixel')} of {summary.flags.size} do: "
            f"{listed(most)}."
        )
    else:
        said.append("No pixel carries a flag.")
    return said


def _look(summary: MapsSummary, freedom: int | None) -> list[str]:
    look = []
    if 1.0 - summary.sound_share > _FLAGGED_MUCH:
        look.append(
            f"{percent(1.0 - summary.sound_share)} of the pixels are flagged: see "
            "which, and why, under Flags."
        )
    if freedom:
        seen = summary.deviance_percentile(50.0)
        wanted = float(chi2.median(freedom)) / freedom
        if seen > _ODD_DEVIANCE * wanted:
            look.append(
                f"The median deviance is {number(seen)} per degree of freedom, "
                f"counting alone gives {number(wanted)}: something besides counting "
                "moves the counts."
            )
    for i, name in enumerate(summary.material):
        ratio = scatter_ratio(summary, i)
        if np.isfinite(ratio) and abs(ratio - 1.0) > _ODD_SCATTER:
            look.append(
                f"{name} scatters between exposures {fixed(ratio, 2)} times its "
                "reported error. If these are repeats of one object, the errors are "
                "off by that factor; if the object moved, it means nothing."
            )
    opens = numbers_in(summary.process.get("open_counts_over_expected", ""))
    if opens and max(abs(v - 1.0) for v in opens) > _ODD_OPEN:
        worst = max(range(len(opens)), key=lambda b: abs(opens[b] - 1.0))
        look.append(
            f"In this scan's open exposures bin {worst + 1} counts "
            f"{fixed(100 * (opens[worst] - 1.0), 2, sign=True)} % against the "
            "calibration: a threshold or the spectrum has moved since the wedge scan."
        )
    return look


def _key_figures(summary: MapsSummary, freedom: int | None) -> list[KeyFigure]:
    found = []
    for i, name in enumerate(summary.material):
        value, error = median(summary.density[i]), median(summary.single_error[i])
        common = median(summary.calibration_error[i])
        found.append(
            KeyFigure(
                name=f"{name}, median pixel",
                text=f"{with_error(value, error)} {GRAMS}",
                remark=f"calibration adds ± {number(common, 2)}",
                value=value,
            )
        )
    found.append(
        KeyFigure(
            name="pixels without a flag",
            text=percent(summary.sound_share),
            remark=f"{np.count_nonzero(summary.flags == 0)} of {summary.flags.size}",
            value=summary.sound_share,
        )
    )
    wanted = ""
    if freedom is not None:
        wanted = f"counting alone: {number(float(chi2.median(freedom)) / freedom)}"
    middle = summary.deviance_percentile(50.0)
    found.append(
        KeyFigure(
            name="median deviance per degree of freedom",
            text=number(middle),
            remark=wanted,
            value=middle,
        )
    )
    return found


def _sections(summary: MapsSummary, row: int, freedom: int | None) -> list[Section]:
    maps: list[str | Picture | Table] = [
        pictures.material_picture(summary, i, row=row)
        for i in range(len(summary.material))
    ]
    sections = [
        Section(title="Maps", parts=maps),
        Section(
            title="Numbers", parts=[numbers_table(summary), *correlation_text(summary)]
        ),
        Section(
            title="Flags",
            parts=[pictures.flags_picture(summary), flags_table(summary)],
        ),
        Section(title="Profile", parts=[pictures.profile_picture(summary, row)]),
        Section(
            title="Fit to the counts",
            parts=[pictures.deviance_picture(summary, freedom)],
        ),
    ]
    if len(summary.exposure) >= FEWEST_REPEATS:
        sections.append(
            Section(
                title="From exposure to exposure",
                parts=[pictures.course_picture(summary), scatter_table(summary)],
            )
        )
    sections.append(Section(title="Record of the run", parts=[record_table(summary)]))
    return sections
