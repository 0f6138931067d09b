"""The page about maps: how much of each material, how sure, and where not."""

from __future__ import annotations

import json
from pathlib import PurePath
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from spectral.errors import InputError
from spectral.reporting import maps_pictures as pictures
from spectral.reporting.maps_summary import MapsSummary, median, summarise
from spectral.reporting.page import KeyFigure, Page, Section, Table
from spectral.reporting.panels import reason_colour
from spectral.reporting.wording import (
    GRAMS,
    NONE,
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

_REPEATS = 4
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
    record, assumed = _record(summary)
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
    if len(summary.exposure) == 1:
        return f"{of} in exposure {summary.exposure[0]} of {where}"
    return f"{of} in {where}"


def _said(summary: MapsSummary) -> list[str]:
    said = []
    for i, name in enumerate(summary.material):
        density = summary.density[i]
        single = median(summary.single_error[i])
        share = median(summary.calibration_error[i])
        low, high = _range(density)
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
        most = [f"{n} {name}" for n, name in reasons if n][:4]
        said.append(
            f"{percent(summary.sound_share)} of the pixels carry no flag; "
            f"{count(int(flagged), 'pixel')} of {summary.flags.size} do: {listed(most)}."
        )
    else:
        said.append("No pixel carries a flag.")
    return said


def _range(
    density: np.ndarray[tuple[int, ...], np.dtype[np.float64]],
) -> tuple[float, float]:
    finite = density[np.isfinite(density)]
    if finite.size == 0:
        return float("nan"), float("nan")
    low, high = np.percentile(finite, [5.0, 95.0])
    return float(low), float(high)


def scatter_ratio(summary: MapsSummary, index: int) -> float:
    """Scatter between exposures over reported error, pooled over the pixels.

    The mean of the squares of both: with few repeats the median ratio of one pixel
    is biased low, the ratio of mean squares is not.
    """
    scatter, error = summary.scatter[index], summary.single_error[index]
    good = np.isfinite(scatter) & np.isfinite(error) & (summary.flags == 0)
    if len(summary.exposure) < _REPEATS or not good.any():
        return float("nan")
    ratio = (scatter[good] / error[good]) ** 2
    return float(np.sqrt(ratio.mean()))


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
    opens = _numbers(summary.process.get("open_counts_over_expected", ""))
    if opens and max(abs(v - 1.0) for v in opens) > _ODD_OPEN:
        worst = max(range(len(opens)), key=lambda b: abs(opens[b] - 1.0))
        look.append(
            f"In this scan's open exposures bin {worst + 1} counts "
            f"{fixed(100 * (opens[worst] - 1.0), 2, sign=True)} % against the "
            "calibration: a threshold or the spectrum has moved since the wedge scan."
        )
    return look


def _numbers(text: str) -> list[float]:
    try:
        values = json.loads(text)
    except json.JSONDecodeError:
        return []
    if not isinstance(values, list):
        return []
    return [float(v) for v in values if isinstance(v, (int, float))]


def _key_figures(summary: MapsSummary, freedom: int | None) -> list[KeyFigure]:
    found = []
    for i, name in enumerate(summary.material):
        value, error = median(summary.density[i]), median(summary.single_error[i])
        found.append(
            KeyFigure(
                name=f"{name}, median pixel",
                text=f"{with_error(value, error)} {GRAMS}",
                remark=(
                    f"calibration adds ± {number(median(summary.calibration_error[i]), 2)}"
                ),
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
        pictures.material_picture(summary, i) for i in range(len(summary.material))
    ]
    sections = [
        Section(title="Maps", parts=maps),
        Section(
            title="Numbers", parts=[_numbers_table(summary), *_correlation(summary)]
        ),
        Section(
            title="Flags",
            parts=[pictures.flags_picture(summary), _flags_table(summary)],
        ),
        Section(title="Profile", parts=[pictures.profile_picture(summary, row)]),
        Section(
            title="Fit to the counts",
            parts=[pictures.deviance_picture(summary, freedom)],
        ),
    ]
    if len(summary.exposure) >= _REPEATS:
        sections.append(
            Section(
                title="From exposure to exposure",
                parts=[pictures.course_picture(summary), _scatter_table(summary)],
            )
        )
    sections.append(Section(title="Record of the run", parts=[_record_table(summary)]))
    return sections


def _numbers_table(summary: MapsSummary) -> Table:
    rows = []
    for i, name in enumerate(summary.material):
        single = median(summary.single_error[i])
        share = median(summary.calibration_error[i])
        low, high = _range(summary.density[i])
        repeats = (single / share) ** 2 if share > 0 else float("inf")
        rows.append(
            (
                name,
                beside(median(summary.density[i]), single),
                beside(low, single),
                beside(high, single),
                number(single),
                number(median(summary.mean_error[i])),
                number(share),
                number(repeats, 2) if np.isfinite(repeats) else NONE,
                str(int(np.count_nonzero(summary.estimates[i]))),
            )
        )
    return Table(
        caption=f"Over the pixels, in {GRAMS}; errors are one standard deviation, medians",
        header=(
            "material",
            "median",
            "5th percentile",
            "95th percentile",
            "error of one exposure",
            f"error of the mean of {len(summary.exposure)}",
            "error from the calibration",
            "exposures at which both are equal",
            "pixels with a value",
        ),
        rows=rows,
    )


def _correlation(summary: MapsSummary) -> list[str]:
    m = len(summary.material)
    pairs = [
        f"{summary.material[i]} and {summary.material[j]} "
        f"{fixed(float(summary.correlation[i, j]), 2, sign=True)}"
        for i in range(m)
        for j in range(i + 1, m)
    ]
    if not pairs:
        return []
    return [
        f"Correlation of the errors of two materials in one pixel: {listed(pairs)}. "
        "An error in one is answered by the other; a sum that the beam sees, like the "
        "total attenuation, is known better than its parts."
    ]


def _flags_table(summary: MapsSummary) -> Table:
    estimates = summary.flags.size * len(summary.exposure)
    rows, colours = [], []
    for flag, reason in zip(
        summary.flagged_estimates, pictures.FLAG_REASONS, strict=True
    ):
        many = summary.flagged_estimates[flag]
        pixels = int(np.count_nonzero(summary.flags & reason.bit))
        colours.append(reason_colour(pictures.FLAG_REASONS, reason))
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


def _scatter_table(summary: MapsSummary) -> Table:
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


def plain_entry(text: str) -> str:
    """An entry of the record without JSON's brackets."""
    try:
        value = json.loads(text)
    except json.JSONDecodeError:
        return text
    return _spelled(value)


def _spelled(value: object) -> str:
    if isinstance(value, dict):
        return "\n".join(
            f"{str(k).replace('_', ' ')}: {_spelled(v)}" for k, v in value.items()
        )
    if isinstance(value, list):
        return ", ".join(_spelled(v) for v in value) if value else "none"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return number(value, 6)
    return str(value)


def _record_table(summary: MapsSummary) -> Table:
    return Table(
        caption="As written in the maps' file",
        header=("subject", "entry"),
        rows=[
            (k.replace("_", " "), plain_entry(v))
            for k, v in summary.process.items()
            if v
        ],
        words=frozenset({1}),
    )


def _record(
    summary: MapsSummary,
) -> tuple[list[tuple[str, str]], list[str]]:
    """Sources for the foot, and assumptions as sentences."""
    process = summary.process
    record = [
        (words, process.get(key, ""))
        for key, words in (
            ("scan", "scan"),
            ("scan_digest", "SHA-256 of the scan"),
            ("calibration_of", "calibrated with"),
            ("calibration_digest", "SHA-256 of the calibration"),
            ("program", "program"),
            ("version", "version"),
            ("date", "date"),
        )
    ]
    facts = _mapping(process.get("assumed", ""))
    if "cross_sections" in facts:
        record.append(("cross sections", str(facts["cross_sections"])))
    assumed = []
    if "voltage_kv" in facts:
        assumed.append(f"tube voltage {facts['voltage_kv']} kV, nominal")
    filters = facts.get("filters")
    if isinstance(filters, list):
        assumed.append(f"beam filters: {listed(filters) if filters else 'none named'}")
    if "sensor" in facts:
        assumed.append(f"sensor: {facts['sensor']}")
    densities = facts.get("densities_g_cm3")
    if isinstance(densities, dict):
        assumed += [f"density of {k}: {v} g/cm3" for k, v in densities.items()]
    for source in (facts.get("assumptions"), _list(process.get("notes", ""))):
        if isinstance(source, list):
            assumed += [str(text) for text in source]
    return record, assumed


def _mapping(text: str) -> dict[str, object]:
    try:
        found = json.loads(text)
    except json.JSONDecodeError:
        return {}
    return found if isinstance(found, dict) else {}


def _list(text: str) -> list[object]:
    try:
        found = json.loads(text)
    except json.JSONDecodeError:
        return []
    return found if isinstance(found, list) else []
