"""The page about a scan: is it fit for use, and what is in it."""

from __future__ import annotations

from pathlib import PurePath
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.step_thickness import wedge_faults
from spectral.physics.cross_sections import table_source
from spectral.reporting import scan_pictures as pictures
from spectral.reporting.calibration_pictures import reasons_picture
from spectral.reporting.calibration_tables import reasons_table
from spectral.reporting.page import KeyFigure, Page, Section, Table
from spectral.reporting.scan_figures import ScanFigures, loss_sentence, scan_figures
from spectral.reporting.wording import (
    NONE,
    count,
    counts,
    fixed,
    listed,
    number,
    percent,
    with_error,
)
from spectral.scans.scan_check import Verdict, check_scan

if TYPE_CHECKING:
    from collections.abc import Sequence

    from spectral.reporting.drawing import Picture
    from spectral.scans.counting_loss import CountingLoss
    from spectral.scans.scan import Scan
    from spectral.scans.scan_check import ScanCheck, ThresholdCheck

_MOST_ROWS = 400
_VERDICT_WORDS = {
    Verdict.FIT: "The scan is fit for use.",
    Verdict.EXCEPTIONS: "The scan is fit for use, with the exceptions below.",
    Verdict.NOT_FIT: "The scan is not fit for use as it stands.",
}


def scan_page(scan: Scan, *, check: ScanCheck | None = None) -> Page:
    """The page about a scan.

    Parameters
    ----------
    scan : Scan
    check : ScanCheck, optional
        Made here if not given.
    """
    if check is None:
        known = wedge_faults(scan) if "wedge" in scan.role else ()
        check = check_scan(scan, known=known)
    figures = scan_figures(scan, check.reasons == 0)
    n, k, y, x = scan.shape
    return Page(
        kind=f"Scan, {y} by {x} pixels, {k} thresholds, {count(n, 'exposure')}",
        title=scan.title or PurePath(scan.source).name,
        said=_said(scan, check),
        look=[_sentence(text) for text in (*check.causes, *check.exceptions)],
        figures=_key_figures(check),
        sections=_sections(scan, check, figures),
        assumed=_assumed(scan),
        record=(
            ("scan", scan.source),
            ("SHA-256 of the scan", scan.digest),
            ("started", scan.start_time),
            ("cross sections in use", table_source()),
        ),
    )


def _sentence(text: str) -> str:
    return f"{text[0].upper()}{text[1:]}{'' if text.endswith(('.', '?')) else '.'}"


def _said(scan: Scan, check: ScanCheck) -> list[str]:
    roles = listed([f"{number} {role}" for role, number in check.roles.items()])
    materials = listed([m.name for m in scan.materials]) or "no named material"
    content = (
        f"{count(scan.shape[0], 'exposure')} ({roles}) at {scan.voltage_kv:g} kV, with "
        f"{materials}; {percent(1.0 - check.bad_pixels / check.reasons.size)} of the "
        "pixels are sound."
    )
    said = [_VERDICT_WORDS[check.verdict], content]
    if check.loss is not None:
        said.append(_sentence(loss_sentence(check.loss)))
    return said


def _key_figures(check: ScanCheck) -> list[KeyFigure]:
    lowest = check.thresholds[0]
    sound = 1.0 - check.bad_pixels / check.reasons.size
    figures = [
        KeyFigure(
            name="sound pixels",
            text=percent(sound),
            remark=f"{check.reasons.size - check.bad_pixels} of {check.reasons.size}",
            value=sound,
        ),
        KeyFigure(
            name="open counts of a pixel, lowest threshold",
            text=counts(lowest.open_counts),
            remark=f"spread between pixels {percent(lowest.spread)}",
            value=lowest.open_counts,
        ),
        KeyFigure(
            name="dark counts, lowest threshold",
            text=f"{number(lowest.dark_rate_per_s)} per second and pixel",
            value=lowest.dark_rate_per_s,
        ),
        KeyFigure(
            name="last open against first",
            text=f"{_drift(lowest)} %",
            remark="lowest threshold, brightest setting",
            value=lowest.drift,
        ),
    ]
    if check.loss is not None:
        figures.append(
            KeyFigure(
                name="dead time",
                text=_dead_time(check.loss),
                remark="above the lowest threshold, from open exposures",
                value=check.loss.median_ns,
            )
        )
    return figures


def _dead_time(loss: CountingLoss) -> str:
    return f"{with_error(loss.median_ns, loss.standard_error_ns)} ns"


def _drift(threshold: ThresholdCheck) -> str:
    return with_error(100 * threshold.drift, 100 * threshold.drift_error, sign=True)


def _sections(scan: Scan, check: ScanCheck, figures: ScanFigures) -> list[Section]:
    sections = [
        Section(
            title="Exposures",
            parts=[
                pictures.course_picture(scan, figures),
                *_problems(check),
                _exposure_table(scan, check, figures),
            ],
        )
    ]
    optional: Sequence[tuple[str, Sequence[Picture | Table | None]]] = (
        ("Wedge steps", [pictures.steps_picture(scan, figures)]),
        (
            "Thresholds",
            [_threshold_table(check), pictures.drift_picture(scan, figures)],
        ),
        (
            "Counting",
            [
                pictures.current_picture(scan, figures, check),
                pictures.dispersion_picture(scan, check),
            ],
        ),
        (
            "Pixels",
            [
                pictures.images_picture(scan, figures, check),
                reasons_picture(check.reasons),
                reasons_table(check.reasons),
            ],
        ),
    )
    for title, parts in optional:
        there = [p for p in parts if p is not None]
        if there:
            sections.append(Section(title=title, parts=there))
    return sections


def _problems(check: ScanCheck) -> list[Table]:
    if not check.problems:
        return []
    return [
        Table(
            caption="Exposures that do not fit what the scan says of them",
            header=("exposure", "problem", "what was seen"),
            rows=[(str(p.exposure), p.kind.value, p.text) for p in check.problems],
            words=frozenset({1, 2}),
        )
    ]


def _exposure_table(scan: Scan, check: ScanCheck, figures: ScanFigures) -> Table:
    troubled = {p.exposure for p in check.problems}
    shown = min(scan.shape[0], _MOST_ROWS)
    rest = scan.shape[0] - shown
    more = f"; the first {shown} of {scan.shape[0]}" if rest else ""
    return Table(
        caption=f"Counts of the median sound pixel above each threshold{more}",
        header=(
            "exposure",
            "role",
            *(f"{m.name} (mm)" for m in scan.materials),
            "time (s)",
            "current (mA)",
            *(f"above {number(float(e))} keV" for e in scan.thresholds_kev),
        ),
        rows=[
            (
                f"{i}{' (see above)' if i in troubled else ''}",
                scan.role[i],
                *(f"{t:g}" if np.isfinite(t) else NONE for t in scan.thickness_mm[i]),
                f"{scan.count_time_s[i]:g}",
                NONE if scan.current_ma is None else f"{scan.current_ma[i]:g}",
                *(counts(float(c)) for c in figures.median[i]),
            )
            for i in range(shown)
        ],
        words=frozenset({1}),
    )


def _threshold_table(check: ScanCheck) -> Table:
    return Table(
        caption="What each threshold counts, over the sound pixels",
        header=(
            "threshold (keV)",
            "dark counts per second",
            "open counts, brightest setting",
            "spread between pixels",
            "last open against first (%)",
        ),
        rows=[
            (
                number(t.threshold_kev),
                number(t.dark_rate_per_s),
                counts(t.open_counts),
                percent(t.spread),
                _drift(t),
            )
            for t in check.thresholds
        ],
    )


def _assumed(scan: Scan) -> list[str]:
    filters = [f"{f.material} {f.thickness_mm:g} mm" for f in scan.filters]
    sensor = "not named"
    if scan.sensor_material is not None and scan.sensor_thickness_mm is not None:
        sensor = f"{scan.sensor_material}, {scan.sensor_thickness_mm:g} mm"
    target = scan.target_material or "not named"
    return [
        f"tube voltage {scan.voltage_kv:g} kV and target {target}, as the scan says",
        f"beam filters: {listed(filters) if filters else 'none named'}",
        f"sensor: {sensor}",
        *(f"{m.name}: {m.formula}, {m.density_g_cm3:g} g/cm3" for m in scan.materials),
        f"counting stops at {fixed(scan.count_limit, 0)}",
        *scan.notes,
    ]
