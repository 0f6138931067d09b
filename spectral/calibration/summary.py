"""A calibration in a few numbers and one screen of text."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.scans.bad_pixels import PixelReason

if TYPE_CHECKING:
    from spectral.calibration.result import Calibration


def calibration_summary(calibration: Calibration) -> dict[str, Any]:
    """Numbers that say how good a calibration is, ready for JSON."""
    c = calibration
    good = c.good
    spread = np.sqrt(np.diag(c.spread))
    error = np.sqrt(
        np.median(np.diagonal(c.departure_covariance[good], axis1=1, axis2=2), axis=0)
    )
    reasons = {
        str(reason.name): int(np.count_nonzero(c.pixel_reasons & reason))
        for reason in PixelReason
        if reason and np.any(c.pixel_reasons & reason)
    }
    out: dict[str, Any] = {
        "scan": c.scan_source,
        "materials": [m.name for m in c.materials],
        "pixels": int(good.size),
        "good_pixels": int(good.sum()),
        "pixels_by_reason": reasons,
        "steps": int((c.steps.areal_density > 0.0).any(axis=1).sum()),
        "largest_g_cm2": c.largest.round(4).tolist(),
        "thresholds_kev": c.thresholds_kev.tolist(),
        "mean_threshold_kev": c.levels_kev.round(3).tolist(),
        "threshold_spread_kev": spread[1:-2].round(3).tolist(),
        "threshold_error_kev": error[1:-2].round(3).tolist(),
        "area_spread": round(float(spread[0]), 4),
        "dead_time_ns": round(c.dead_time_ns, 1),
        "noise_kev": round(c.model.noise_kev, 3),
        "deviance_per_freedom": round(float(np.nanmedian(c.deviance)), 3),
        "largest_physics_residual": round(
            float(np.abs(c.steps.physics_residual).max()), 5
        ),
        "largest_residual": round(float(np.abs(c.steps.residual).max()), 5),
        "correction_degree": c.residual.degree,
        "findings": list(c.findings),
        "assumptions": list(c.assumptions),
    }
    if c.promise is not None:
        ratio = c.promise.bias / c.promise.single_error
        out["leave_one_step_out_bias_g_cm2"] = (
            np.sqrt((c.promise.bias**2).mean(axis=0)).round(5).tolist()
        )
        out["leave_one_step_out_bias_over_error"] = (
            np.sqrt((ratio**2).mean(axis=0)).round(4).tolist()
        )
        out["expected_fixed_pattern_over_error"] = c.promise.fixed_pattern.round(
            4
        ).tolist()
    return out


def calibration_text(calibration: Calibration) -> str:
    """One screen of text about a calibration."""
    s = calibration_summary(calibration)
    lines = [
        f"{s['good_pixels']} of {s['pixels']} pixels calibrated with {s['steps']} "
        + f"wedge exposures of {' and '.join(s['materials'])}",
    ]
    if s["pixels_by_reason"]:
        listed = ", ".join(f"{n} {r.lower()}" for r, n in s["pixels_by_reason"].items())
        lines.append(f"left out: {listed}")
    lines.append("threshold   nominal      mean    spread   error (keV)")
    for k, row in enumerate(
        zip(
            s["thresholds_kev"],
            s["mean_threshold_kev"],
            s["threshold_spread_kev"],
            s["threshold_error_kev"],
            strict=True,
        )
    ):
        nominal, mean, spread, error = row
        lines.append(
            f"{k + 1:9d} {nominal:9.2f} {mean:9.2f} {spread:9.2f} {error:7.2f}"
        )
    lines.append(
        f"dead time {s['dead_time_ns']:.0f} ns, deviance per degree of freedom "
        f"{s['deviance_per_freedom']:.3f}; the smooth correction takes up to "
        f"{100 * s['largest_physics_residual']:.2f} % and leaves "
        f"{100 * s['largest_residual']:.2f} %"
    )
    if "leave_one_step_out_bias_g_cm2" in s:
        for name, bias, share, fixed in zip(
            s["materials"],
            s["leave_one_step_out_bias_g_cm2"],
            s["leave_one_step_out_bias_over_error"],
            s["expected_fixed_pattern_over_error"],
            strict=True,
        ):
            lines.append(
                f"{name}: a step left out is met to {bias:.4f} g/cm2 rms "
                f"({share:.3f} of one exposure's error); fixed pattern "
                f"{fixed:.2f} of that error"
            )
    lines.extend(f"note: {finding}" for finding in s["findings"])
    lines.extend(f"assumed: {what}" for what in s["assumptions"])
    return "\n".join(lines)
