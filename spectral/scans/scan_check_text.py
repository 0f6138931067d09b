"""A scan check as one screen of text, and as plain data for machines."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Iterator

    from spectral.scans.dispersion import Dispersion
    from spectral.scans.scan_check import ScanCheck

_MOST_PROBLEMS = 8
_MOST_SETTINGS = 4


def check_text(check: ScanCheck) -> str:
    """One screen on a scan: the verdict first, then the figures behind it."""
    return "\n".join(_lines(check))


def _lines(check: ScanCheck) -> Iterator[str]:
    n, k, y, x = check.shape
    roles = ", ".join(f"{number} {role}" for role, number in check.roles.items())
    yield f"{check.source}: {check.verdict.value}"
    for sentence in check.causes:
        yield f"  ! {sentence}"
    for sentence in check.exceptions:
        yield f"  - {sentence}"
    yield ""
    yield f"{n} exposures ({roles}), {k} thresholds, {y} x {x} pixels"
    for note in check.notes:
        yield f"  {note}"
    yield ""
    yield from _threshold_lines(check)
    yield ""
    yield from _loss_lines(check)
    yield from _dispersion_lines(check)
    yield ""
    yield from _pixel_lines(check)
    yield from _problem_lines(check)


def _number(value: float, form: str) -> str:
    return "-" if math.isnan(value) else format(value, form)


def _threshold_lines(check: ScanCheck) -> Iterator[str]:
    yield "above keV   dark /s   open counts   pixel spread   drift, first to last open"
    for one in check.thresholds:
        drift = _number(one.drift, "+.2%")
        error = _number(one.drift_error, ".2%")
        yield (
            f"{one.threshold_kev:9g}{_number(one.dark_rate_per_s, '10.3g'):>10}"
            f"{_number(one.open_counts, '14.0f'):>14}{_number(one.spread, '.1%'):>15}"
            f"{drift:>11} +- {error}"
        )


def _loss_lines(check: ScanCheck) -> Iterator[str]:
    if check.loss is None:
        yield "dead time: not measured (it takes open exposures at two currents)"
        return
    loss = check.loss
    if not loss.is_seen:
        yield (
            f"no loss to be seen up to {loss.highest_rate_per_s:.3g} /s (dead time "
            f"{loss.median_ns:.0f} +- {loss.standard_error_ns:.0f} ns)"
        )
        return
    yield (
        f"dead time: {loss.median_ns:.0f} +- {loss.standard_error_ns:.0f} ns, "
        f"{loss.loss:.1%} of the pulses lost at {loss.highest_rate_per_s:.3g} /s"
    )


def _dispersion_lines(check: ScanCheck) -> Iterator[str]:
    if not check.dispersions:
        yield "variance over mean: not measured (it takes two exposures of one setting)"
        return
    largest = sorted(check.dispersions, key=lambda d: -len(d.exposures))
    yield "variance over mean across repeats, lowest threshold to highest"
    for one in largest[:_MOST_SETTINGS]:
        yield f"  {_setting(check, one)}"


def _setting(check: ScanCheck, one: Dispersion) -> str:
    ratio = " ".join(_number(v, ".2f") for v in one.ratio.tolist())
    expected = " ".join(_number(v, ".2f") for v in one.expected.tolist())
    first, last = one.exposures[0], one.exposures[-1]
    why = "dead time" if check.loss is not None else "Poisson"
    return f"{len(one.exposures)} of {first} to {last}: {ratio}   ({why}: {expected})"


def _pixel_lines(check: ScanCheck) -> Iterator[str]:
    total = check.reasons.size
    yield f"bad pixels: {check.bad_pixels} of {total} ({check.bad_pixels / total:.2%})"
    if check.bad_pixels:
        by_reason = check.pixels_by_reason.items()
        yield "  " + ", ".join(
            f"{number} {name.lower().replace('_', ' ')}" for name, number in by_reason
        )


def _problem_lines(check: ScanCheck) -> Iterator[str]:
    for problem in check.problems[:_MOST_PROBLEMS]:
        yield f"exposure {problem.exposure}: {problem.text}"
    more = len(check.problems) - _MOST_PROBLEMS
    if more > 0:
        yield f"and {more} more"


def check_summary(check: ScanCheck) -> dict[str, Any]:
    """The check as plain numbers, texts and lists; None where nothing was measured."""
    loss = check.loss
    n, k, y, x = check.shape
    return {
        "source": check.source,
        "verdict": check.verdict.value,
        "causes": list(check.causes),
        "exceptions": list(check.exceptions),
        "exposures": n,
        "roles": check.roles,
        "rows": y,
        "columns": x,
        "thresholds": [
            {
                "threshold_kev": one.threshold_kev,
                "dark_rate_per_s": _plain(one.dark_rate_per_s),
                "open_counts": _plain(one.open_counts),
                "spread": _plain(one.spread),
                "drift": _plain(one.drift),
                "drift_error": _plain(one.drift_error),
            }
            for one in check.thresholds[:k]
        ],
        "dead_time": None
        if loss is None
        else {
            "median_ns": loss.median_ns,
            "standard_error_ns": loss.standard_error_ns,
            "highest_rate_per_s": loss.highest_rate_per_s,
            "loss": loss.loss,
        },
        "dispersion": [
            {
                "exposures": list(one.exposures),
                "ratio": [_plain(v) for v in one.ratio.tolist()],
                "standard_error": [_plain(v) for v in one.standard_error.tolist()],
                "expected": [_plain(v) for v in one.expected.tolist()],
                "outside_95_percent": [_plain(v) for v in one.outside.tolist()],
            }
            for one in check.dispersions
        ],
        "bad_pixels": check.bad_pixels,
        "pixels_by_reason": check.pixels_by_reason,
        "problems": [
            {"exposure": p.exposure, "kind": p.kind.value, "text": p.text}
            for p in check.problems
        ],
        "notes": list(check.notes),
    }


def _plain(value: float) -> float | None:
    """Number for JSON, which knows no NaN."""
    return None if math.isnan(value) else float(value)
