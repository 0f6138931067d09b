"""Maps in a few numbers and one screen of text."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.scans.flags import MEANING

if TYPE_CHECKING:
    from spectral.scans.maps import Maps


def maps_summary(maps: Maps, *, exposures: int | None = None) -> dict[str, Any]:
    """Numbers that describe maps, ready for JSON.

    Parameters
    ----------
    maps : Maps
    exposures : int, optional
        How many the series has, if the maps are only some of them.
    """
    good = maps.flags == 0
    per_material = {}
    for j, name in enumerate(maps.material):
        value = maps.areal_density[:, j][good]
        per_material[name] = {
            "median_g_cm2": _rounded(value),
            "median_error_g_cm2": _rounded(maps.areal_density_errors[:, j][good]),
            "median_calibration_error_g_cm2": _rounded(
                maps.calibration_errors[:, j][good]
            ),
        }
    return {
        "exposures": len(maps.exposure) if exposures is None else exposures,
        "summed_up": len(maps.exposure),
        "pixels": int(good[0].size),
        "good_share": round(float(good.mean()), 5),
        "flags": {
            str(flag.name): round(float(((maps.flags & int(flag)) != 0).mean()), 6)
            for flag in MEANING
            if np.any(maps.flags & int(flag))
        },
        "mean_deviance": _rounded(maps.deviance[good], np.mean),
        "materials": per_material,
        "notes": json.loads(maps.process.get("notes", "[]")),
    }


def _rounded(values: Any, how: Any = np.median) -> float | None:
    return round(float(how(values)), 6) if values.size else None


def maps_text(maps: Maps, *, exposures: int | None = None) -> str:
    """One screen of text about maps; arguments as `maps_summary`."""
    s = maps_summary(maps, exposures=exposures)
    lines = [
        f"{s['exposures']} exposures of {s['pixels']} pixels decomposed; "
        + f"{100 * s['good_share']:.2f} % of the estimates carry no flag"
    ]
    if s["summed_up"] < s["exposures"]:
        lines.append(f"figures from {s['summed_up']} of them, spread over the series")
    meanings = {str(flag.name): text for flag, text in MEANING.items()}
    lines.extend(
        f"  {100 * share:.2f} % {name}: {meanings[name]}"
        for name, share in s["flags"].items()
    )
    for name, m in s["materials"].items():
        if m["median_g_cm2"] is None:
            continue
        lines.append(
            f"{name}: median {m['median_g_cm2']:.4f} g/cm2, error of one exposure "
            f"{m['median_error_g_cm2']:.4f}, the calibration adds "
            f"{m['median_calibration_error_g_cm2']:.4f}"
        )
    if s["mean_deviance"] is not None:
        lines.append(f"deviance per degree of freedom {s['mean_deviance']:.3f} (mean)")
    lines.extend(f"note: {note}" for note in s["notes"])
    return "\n".join(lines)
