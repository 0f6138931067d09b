"""The page about two calibrations: what changed, and whether it is real."""

from __future__ import annotations

from pathlib import Path, PurePath
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.comparison import FALSE_ALARM, compare
from spectral.calibration.comparison_summary import WIDER, comparison_sentences
from spectral.reporting.calibration_figures import unknowns
from spectral.reporting.calibration_pictures import reasons_picture
from spectral.reporting.calibration_tables import reasons_table
from spectral.reporting.comparison_pictures import (
    area_change_picture,
    threshold_change_pictures,
)
from spectral.reporting.drawing import page_style
from spectral.reporting.page import KeyFigure, Page, Section, Table
from spectral.reporting.report import write_whole
from spectral.reporting.wording import (
    NONE,
    fixed,
    listed,
    number,
    percent,
    with_error,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.comparison import CalibrationComparison
    from spectral.calibration.result import Calibration
    from spectral.reporting.drawing import Picture


def comparison_page(
    old: Calibration,
    new: Calibration,
    *,
    names: tuple[str, str] = ("old", "new"),
    comparison: CalibrationComparison | None = None,
) -> Page:
    """The page about what changed from an old calibration to a new one.

    Parameters
    ----------
    old, new : Calibration
    names : tuple of str
        Files that they came from.
    comparison : CalibrationComparison, optional
        If there is one already.

    Raises
    ------
    CalibrationError
        If they cannot be compared (`spectral.calibration.comparison.compare`).
    """
    seen = compare(old, new) if comparison is None else comparison
    y, x = old.shape
    with page_style():
        return Page(
            kind=(
                f"Two calibrations, {y} by {x} pixels, {old.thresholds_kev.size} "
                f"thresholds, {old.voltage_kv:g} kV"
            ),
            title=f"from {_named(names[0])} to {_named(names[1])}",
            said=comparison_sentences(seen),
            look=_look(seen),
            figures=_figures(seen),
            sections=_sections(seen, old, new),
            assumed=_assumed(),
            record=(
                ("old calibration", f"{names[0]}, made {old.created}"),
                ("SHA-256 of the old calibration", old.digest),
                ("wedge scan of the old calibration", old.scan_source),
                ("new calibration", f"{names[1]}, made {new.created}"),
                ("SHA-256 of the new calibration", new.digest),
                ("wedge scan of the new calibration", new.scan_source),
            ),
        )


def write_comparison(
    old: Calibration,
    new: Calibration,
    out_path: str | Path,
    *,
    names: tuple[str, str] = ("old", "new"),
    comparison: CalibrationComparison | None = None,
) -> Page:
    """Write the page of `comparison_page`; the file appears only when complete.

    Returns
    -------
    Page
        What was written.
    """
    page = comparison_page(old, new, names=names, comparison=comparison)
    write_whole(Path(out_path), page.html())
    return page


def _named(name: str) -> str:
    return PurePath(name).name or name


def _look(seen: CalibrationComparison) -> list[str]:
    look = list(seen.notes)
    wide = [
        f"threshold {k + 1} ({fixed(float(ratio), 2)} times)"
        for k, ratio in enumerate(seen.spread_ratio)
        if ratio > WIDER
    ]
    if wide:
        look.append(
            "Pixels moved apart by more than the errors of both calibrations explain: "
            f"{listed(wide)}."
        )
    if seen.changed.sum() > 3.0 + 5.0 * seen.by_chance:
        look.append(
            f"{int(seen.changed.sum())} pixels changed, where "
            f"{fixed(seen.by_chance, 1)} are expected by chance."
        )
    return look


def _figures(seen: CalibrationComparison) -> list[KeyFigure]:
    average = seen.average
    k = int(np.abs(seen.median_pull).argmax())
    middle, error = float(seen.median_kev[k]), float(seen.median_error_kev[k])
    share = float(seen.changed.sum() / seen.both_good.sum())
    return [
        KeyFigure(
            name=f"clearest change of a threshold ({k + 1})",
            text=f"{with_error(middle, error, sign=True)} keV",
            remark="median pixel",
            value=middle,
        ),
        KeyFigure(
            name="spread between pixels, over the expected",
            text=fixed(float(seen.spread_ratio.max()), 2),
            remark="largest of the thresholds; unchanged pixels: 1",
            value=float(seen.spread_ratio.max()),
        ),
        KeyFigure(
            name="pixels changed beyond their errors",
            text=percent(share, 2),
            remark=f"by chance alone {percent(FALSE_ALARM, 2)}",
            value=share,
        ),
        KeyFigure(
            name="flux per mA s",
            text=_in_percent(average.flux_share, average.flux_error),
            value=average.flux_share,
        ),
        KeyFigure(
            name="dead time",
            text=_in_percent(average.dead_time_share, average.dead_time_error),
            value=average.dead_time_share,
        ),
        KeyFigure(
            name="newly bad pixels",
            text=str(int(np.count_nonzero(seen.newly_bad))),
            remark=f"{int(np.count_nonzero(seen.recovered))} recovered",
            value=float(np.count_nonzero(seen.newly_bad)),
        ),
    ]


def _in_percent(share: float, error: float) -> str:
    return f"{with_error(100.0 * share, 100.0 * error, sign=True)} %"


def _sections(
    seen: CalibrationComparison, old: Calibration, new: Calibration
) -> list[Section]:
    return [
        Section(
            title="Thresholds",
            parts=[*threshold_change_pictures(seen), _threshold_table(seen)],
        ),
        Section(title="Areas and single pixels", parts=[area_change_picture(seen)]),
        Section(
            title="Unfit pixels",
            parts=[
                *_reason_parts(seen.newly_bad, "newly bad pixels"),
                *_reason_parts(seen.recovered, "recovered pixels, by former reason"),
            ],
        ),
        Section(
            title="Tube, sensor and quality",
            parts=[_average_table(seen), _unknowns_table(old, new)],
        ),
    ]


def _reason_parts(
    reasons: NDArray[np.uint16], title: str
) -> list[str | Picture | Table]:
    if not reasons.any():
        return [f"There are no {title.partition(',')[0]}."]
    return [reasons_picture(reasons, title=title), reasons_table(reasons)]


def _threshold_table(seen: CalibrationComparison) -> Table:
    rows = [
        (
            f"{k + 1}",
            number(float(seen.thresholds_kev[k])),
            with_error(
                float(seen.median_kev[k]), float(seen.median_error_kev[k]), sign=True
            ),
            fixed(float(seen.spread_kev[k]), 3),
            fixed(float(seen.expected_spread_kev[k]), 3),
            fixed(float(seen.spread_ratio[k]), 2),
        )
        for k in range(seen.thresholds_kev.size)
    ]
    return Table(
        caption="Change of the thresholds, in keV",
        header=(
            "threshold",
            "setting",
            "new minus old, median pixel",
            "spread between pixels",
            "spread expected of unchanged pixels",
            "ratio",
        ),
        rows=rows,
    )


def _average_table(seen: CalibrationComparison) -> Table:
    average = seen.average
    before, after = seen.residual_percent
    left = 100.0 * float(np.abs(np.expm1(average.left)).max())
    rows = [
        ("flux per mA s", _in_percent(average.flux_share, average.flux_error)),
        (
            "electronic noise",
            f"{with_error(average.noise_kev, average.noise_error_kev, sign=True)} keV",
        ),
        ("dead time", _in_percent(average.dead_time_share, average.dead_time_error)),
        ("expected counts that these changes do not explain, at most", f"{left:.2f} %"),
        ("mean counts missed by the old calibration, rms", f"{before:.3f} %"),
        ("mean counts missed by the new calibration, rms", f"{after:.3f} %"),
    ]
    first, second = seen.fixed_pattern
    for i, name in enumerate(seen.materials):
        if first is not None and second is not None:
            rows.append(
                (
                    f"promised fixed pattern of {name} over one exposure's error",
                    f"{fixed(float(first[i]), 3)}, then {fixed(float(second[i]), 3)}",
                )
            )
    return Table(
        caption="The average pixel, and how good both are",
        header=("what", "change, or old then new"),
        rows=rows,
    )


def _unknowns_table(old: Calibration, new: Calibration) -> Table:
    before = {u.words: u for u in unknowns(old)}
    rows = [
        (
            u.words,
            u.unit or NONE,
            with_error(before[u.words].value, before[u.words].error),
            with_error(u.value, u.error),
        )
        for u in unknowns(new)
        if u.words in before
    ]
    return Table(
        caption=(
            "Unknowns as each was fitted: what one fit calls a threshold the other may "
            "call filtration, so that single lines must not be subtracted"
        ),
        header=("unknown", "unit", "old", "new"),
        rows=rows,
        words=frozenset({1}),
    )


def _assumed() -> list[str]:
    return [
        "both calibrations are of one detector, pixel for pixel, and of one beam",
        (
            "the change of the average pixel is that of thresholds, flux, noise and "
            "dead time; beam and sensor are taken as unchanged"
        ),
        (
            f"a pixel counts as changed beyond the chi-square limit that a share of "
            f"{FALSE_ALARM:g} of unchanged pixels exceeds"
        ),
    ]
