"""A comparison of two calibrations in numbers and one screen of text."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.calibration.comparison import FALSE_ALARM, by_reason

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.comparison import CalibrationComparison

WIDER = 1.25
"""Pixels moved apart if the spread exceeds the expected one by this factor."""


def comparison_summary(comparison: CalibrationComparison) -> dict[str, Any]:
    """Numbers of a comparison, ready for JSON."""
    c = comparison
    a = c.average
    return {
        "old": c.old,
        "new": c.new,
        "pixels_good_in_both": int(c.both_good.sum()),
        "thresholds_kev": c.thresholds_kev.tolist(),
        "threshold_change_kev": _rounded(c.median_kev, 4),
        "threshold_change_error_kev": _rounded(c.median_error_kev, 4),
        "threshold_change_over_error": _rounded(c.median_pull, 2),
        "chance_if_no_threshold_moved": float(f"{c.average.shift_chance:.3g}"),
        "spread_of_change_kev": _rounded(c.spread_kev, 4),
        "expected_spread_kev": _rounded(c.expected_spread_kev, 4),
        "spread_over_expected": _rounded(c.spread_ratio, 3),
        "area_spread_percent": round(c.area_spread_percent, 4),
        "expected_area_spread_percent": round(c.expected_area_spread_percent, 4),
        "changed_pixels": int(c.changed.sum()),
        "changed_by_chance": round(c.by_chance, 2),
        "false_alarm": FALSE_ALARM,
        "flux_per_mas_change_percent": round(100.0 * a.flux_share, 4),
        "flux_per_mas_change_error_percent": round(100.0 * a.flux_error, 4),
        "noise_change_kev": round(a.noise_kev, 4),
        "noise_change_error_kev": round(a.noise_error_kev, 4),
        "dead_time_change_percent": round(100.0 * a.dead_time_share, 3),
        "dead_time_change_error_percent": round(100.0 * a.dead_time_error, 3),
        "unexplained_counts_percent": round(_unexplained_percent(c), 4),
        "unknowns": {
            u.name: {
                "old": round(u.old, 5),
                "old_error": _finite(u.old_error),
                "new": round(u.new, 5),
                "new_error": _finite(u.new_error),
            }
            for u in c.unknowns
        },
        "newly_bad_pixels": int(np.count_nonzero(c.newly_bad)),
        "newly_bad_by_reason": by_reason(c.newly_bad),
        "recovered_pixels": int(np.count_nonzero(c.recovered)),
        "recovered_by_reason": by_reason(c.recovered),
        "residual_percent": [round(r, 5) for r in c.residual_percent],
        "fixed_pattern_over_error": [
            None if p is None else _rounded(p, 4) for p in c.fixed_pattern
        ],
        "said": list(comparison_sentences(c)),
        "notes": list(c.notes),
    }


def comparison_text(comparison: CalibrationComparison) -> str:
    """One screen of text about a comparison."""
    c = comparison
    lines = [
        f"old: {c.old}",
        f"new: {c.new}",
        *comparison_sentences(c),
        "threshold   nominal    median   error    spread   expected (change, keV)",
    ]
    lines.extend(
        f"{k + 1:9d} {c.thresholds_kev[k]:9.2f} {c.median_kev[k]:+9.3f} "
        f"{c.median_error_kev[k]:7.3f} {c.spread_kev[k]:9.3f} "
        f"{c.expected_spread_kev[k]:10.3f}"
        for k in range(c.thresholds_kev.size)
    )
    lines.extend(f"note: {note}" for note in c.notes)
    return "\n".join(lines)


def comparison_sentences(comparison: CalibrationComparison) -> tuple[str, ...]:
    """The answer in sentences."""
    return (
        _thresholds(comparison),
        _spread(comparison),
        _others(comparison),
        _bad(comparison),
        _quality(comparison),
    )


def _thresholds(c: CalibrationComparison) -> str:
    k = int(np.abs(c.median_pull).argmax())
    chance = c.average.shift_chance
    size = (
        f"threshold {k + 1}, {c.median_kev[k]:+.3f} keV in the median pixel with an "
        f"error of {c.median_error_kev[k]:.3f} keV"
    )
    if chance < FALSE_ALARM:
        return (
            f"The thresholds moved on average; the clearest change is that of {size} "
            f"(chance of all changes together if none moved: {chance:.1g})."
        )
    return (
        "The thresholds did not clearly move on average; the largest change for its "
        f"error is that of {size} (chance of all changes together if none moved: "
        f"{chance:.2g})."
    )


def _spread(c: CalibrationComparison) -> str:
    ratio = c.spread_ratio
    k = int(ratio.argmax())
    found = int(c.changed.sum())
    verdict = (
        "pixels moved apart" if ratio[k] > WIDER else "which the errors of both explain"
    )
    return (
        f"Between pixels the change of threshold {k + 1} spreads by "
        f"{c.spread_kev[k]:.3f} keV, {ratio[k]:.2f} times what is expected of "
        f"unchanged pixels: {verdict}. {found} of {int(c.both_good.sum())} pixels "
        f"changed by more than their errors allow, where {c.by_chance:.1f} are expected by chance."
    )


def _others(c: CalibrationComparison) -> str:
    a = c.average
    return (
        f"Flux per mA s changed by {100 * a.flux_share:+.2f} % "
        f"(error {100 * a.flux_error:.2f} %), noise by {a.noise_kev:+.3f} keV "
        f"({a.noise_error_kev:.3f} keV), dead time by {100 * a.dead_time_share:+.1f} % "
        f"({100 * a.dead_time_error:.1f} %); what these leave of the expected counts "
        f"is at most {_unexplained_percent(c):.2f} %. Areas of pixels changed by "
        f"{c.area_spread_percent:.2f} % (standard deviation; expected of unchanged "
        f"pixels {c.expected_area_spread_percent:.2f} %)."
    )


def _bad(c: CalibrationComparison) -> str:
    parts = []
    for what, reasons in (("newly bad", c.newly_bad), ("recovered", c.recovered)):
        kinds = ", ".join(
            f"{n} {name.replace('_', ' ').lower()}"
            for name, n in by_reason(reasons).items()
        )
        count = int(np.count_nonzero(reasons))
        parts.append(f"{count} {what}{f' ({kinds})' if kinds else ''}")
    return f"Pixels: {', '.join(parts)}."


def _quality(c: CalibrationComparison) -> str:
    before, after = c.residual_percent
    said = f"The mean counts were met to {before:.3f} % and are met to {after:.3f} %"
    first, second = c.fixed_pattern
    if first is None or second is None:
        return f"{said}."
    parts = ", ".join(
        f"{name} {x:.3f} and {y:.3f}"
        for name, x, y in zip(c.materials, first, second, strict=True)
    )
    return f"{said}; promised fixed pattern over one exposure's error: {parts}."


def _unexplained_percent(c: CalibrationComparison) -> float:
    return float(100.0 * np.abs(np.expm1(c.average.left)).max())


def _rounded(values: NDArray[np.float64], places: int) -> list[float]:
    return [float(v) for v in np.round(values, places)]


def _finite(value: float) -> float | None:
    return round(value, 5) if np.isfinite(value) else None
