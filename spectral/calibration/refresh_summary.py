"""What a refresh found, in numbers and one screen of text."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.calibration.comparison import by_reason
from spectral.calibration.drift_spread import CLASSES

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.refresh import Refreshed


def refresh_summary(refreshed: Refreshed) -> dict[str, Any]:
    """Numbers of a refresh, ready for JSON."""
    common, pixels = refreshed.common, refreshed.pixels
    return {
        "full_scan_needed": refreshed.full_scan_needed,
        "reasons": list(refreshed.reasons),
        "notes": list(refreshed.notes),
        "pixels": int(refreshed.pixel.size),
        "thresholds_kev": refreshed.calibration.thresholds_kev.tolist(),
        "threshold_shift_kev": _rounded(common.shift_kev),
        "threshold_shift_error_kev": _rounded(common.shift_error_kev),
        "chance_if_no_threshold_moved": float(f"{common.shift_chance:.3g}"),
        "tube_output": _rounded(common.output, 5),
        "tube_output_error": _rounded(common.output_error, 5),
        "noise_variance_change_kev2": round(common.variance_kev2, 4),
        "noise_variance_change_error_kev2": round(common.variance_error_kev2, 4),
        "dead_time_change_percent": round(100.0 * common.ln_dead_time, 3),
        "dead_time_change_error_percent": round(100.0 * common.ln_dead_time_error, 3),
        "pixel_drift": dict(zip(CLASSES, _rounded(pixels.spread, 5), strict=True)),
        "pixel_drift_error": dict(
            zip(CLASSES, _rounded(pixels.spread_error, 5), strict=True)
        ),
        "largest_miss_before_percent": round(_largest_percent(common.before), 4),
        "largest_miss_after_percent": round(_largest_percent(common.residual), 4),
        "chi_square": round(common.chi_square, 2),
        "degrees_of_freedom": common.freedom,
        "chance": float(f"{common.chance:.3g}"),
        "newly_bad_by_reason": by_reason(refreshed.new_reasons),
    }


def refresh_text(refreshed: Refreshed) -> str:
    """One screen of text about a refresh."""
    common = refreshed.common
    lines = ["threshold   nominal     moved   error (keV)"]
    lines.extend(
        f"{k + 1:9d} {nominal:9.2f} {shift:+9.3f} {error:7.3f}"
        for k, (nominal, shift, error) in enumerate(
            zip(
                refreshed.calibration.thresholds_kev,
                common.shift_kev,
                common.shift_error_kev,
                strict=True,
            )
        )
    )
    lines += _movement(refreshed)
    bad = by_reason(refreshed.new_reasons)
    if bad:
        kinds = ", ".join(f"{n} {r.replace('_', ' ').lower()}" for r, n in bad.items())
        lines.append(f"newly bad pixels: {kinds}")
    lines.extend(f"note: {note}" for note in refreshed.notes)
    if refreshed.full_scan_needed:
        lines.append("A full wedge scan is needed:")
        lines.extend(f"  {reason}" for reason in refreshed.reasons)
    else:
        lines.append("No full wedge scan is needed.")
    return "\n".join(lines)


def _movement(refreshed: Refreshed) -> tuple[str, ...]:
    common, pixels = refreshed.common, refreshed.pixels
    output = 100.0 * (float(common.output.mean()) - 1.0)
    tube = (
        f"tube output {output:+.2f} %, noise variance {common.variance_kev2:+.3f} keV2 "
        f"(error {common.variance_error_kev2:.3f}), dead time "
        f"{100 * common.ln_dead_time:+.1f} % "
        f"(error {100 * common.ln_dead_time_error:.1f} %)"
    )
    apart = (
        f"pixels drifted apart by {pixels.spread[1]:.3f} keV (error "
        f"{pixels.spread_error[1]:.3f}) in thresholds, {100 * pixels.spread[0]:.2f} % "
        "in area"
    )
    met = (
        f"mean counts were missed by up to {_largest_percent(common.before):.2f} % and "
        f"are now met to {_largest_percent(common.residual):.2f} % (chi-square "
        f"{common.chi_square:.0f} for {common.freedom} degrees of freedom)"
    )
    shared = (
        "chance of such shifts, all together, if no threshold moved: "
        f"{common.shift_chance:.2g}; their errors go together, for a shift that all "
        "share resembles a change of the tube's output"
    )
    return shared, tube, apart, met


def _largest_percent(log_ratio: NDArray[np.float64]) -> float:
    return float(100.0 * np.abs(np.expm1(log_ratio)).max())


def _rounded(values: NDArray[np.float64], places: int = 4) -> list[float]:
    return [float(v) for v in np.round(values, places)]
