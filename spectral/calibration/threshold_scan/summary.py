"""Threshold energies in a few lines, for people and for machines."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.calibration.threshold_scan.flags import MEANING, ThresholdFlag

if TYPE_CHECKING:
    from collections.abc import Sequence

    from spectral.calibration.threshold_scan.result import ThresholdEnergies


def threshold_summary(
    energies: ThresholdEnergies, settings: Sequence[float] = ()
) -> dict[str, Any]:
    """Figures of threshold energies; energies at settings if any are given."""
    usable = energies.usable
    return {
        "pixels": int(usable.size),
        "usable_pixels": int(usable.sum()),
        "flagged": {
            str(flag.name): int(np.sum((energies.flags & np.uint16(flag)) != 0))
            for flag in MEANING
            if np.any(energies.flags & np.uint16(flag))
        },
        "landmarks": [_landmark(energies, j) for j in range(len(energies.landmarks))],
        "offset_kev": _middle(energies.offset_kev[usable]),
        "gain_kev": _middle(energies.gain_kev[usable]),
        "noise_kev": _middle(energies.noise_kev[usable]),
        "settings": _at_settings(energies, settings),
        "assumptions": list(energies.assumptions),
    }


def _landmark(energies: ThresholdEnergies, j: int) -> dict[str, Any]:
    error = energies.place_error[j] * np.abs(energies.gain_kev)
    error = error[np.isfinite(error)]
    flags = energies.landmark_flags[j]
    lost = (flags != 0) & ((flags & np.uint16(ThresholdFlag.MASKED)) == 0)
    return {
        "name": energies.landmarks[j],
        "energy_kev": float(energies.landmark_kev[j]),
        "pixel_error_kev": float(np.median(error)) if error.size else None,
        "common_error_kev": _number(energies.common_error_kev[j]),
        "residual_kev": _number(energies.residual_kev[j]),
        "lost_pixels": int(lost.sum()),
    }


def _at_settings(
    energies: ThresholdEnergies, settings: Sequence[float]
) -> list[dict[str, Any]]:
    """Mean, spread and errors at each setting over the usable pixels."""
    if not settings:
        return []
    energy, error = energies.energies(np.asarray(settings, dtype=np.float64))
    common = energies.common_error(np.asarray(settings, dtype=np.float64))
    which = energies.comparator(len(settings))
    low, high = energies.scanned
    found = []
    for k, setting in enumerate(settings):
        usable = energies.usable[which[k]]
        found.append(
            {
                "setting": float(setting),
                **_middle(energy[k][usable]),
                "pixel_error_kev": _middle(error[k][usable])["median"],
                "common_error_kev": _number(common[k]),
                "outside_scanned": not low <= setting <= high,
            }
        )
    return found


def _middle(values: np.ndarray[Any, np.dtype[np.float64]]) -> dict[str, float | None]:
    """Median and standard deviation, None where there are no values."""
    values = values[np.isfinite(values)]
    if values.size == 0:
        return {"median": None, "spread": None}
    return {"median": float(np.median(values)), "spread": float(np.std(values))}


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def threshold_text(energies: ThresholdEnergies, settings: Sequence[float] = ()) -> str:
    """The summary for people."""
    facts = threshold_summary(energies, settings)
    lines = [
        f"{facts['usable_pixels']} of {facts['pixels']} pixels have an energy scale",
        (
            f"keV at setting 0: {_pair(facts['offset_kev'])}; keV per unit: "
            f"{_pair(facts['gain_kev'])}; noise: {_pair(facts['noise_kev'])} keV "
            "(median, standard deviation between pixels)"
        ),
    ]
    lines += [
        f"{mark['name']} at {mark['energy_kev']:.2f} keV: place known to "
        f"{_plain(mark['pixel_error_kev'])} keV in a pixel and "
        f"{_plain(mark['common_error_kev'])} keV in common, residual "
        f"{_plain(mark['residual_kev'])} keV, doubtful in {mark['lost_pixels']} pixels"
        for mark in facts["landmarks"]
    ]
    lines += [
        f"setting {at['setting']:g}: {_pair(at)} keV, error "
        f"{_plain(at['pixel_error_kev'])} keV in a pixel and "
        f"{_plain(at['common_error_kev'])} keV in common"
        + (" (outside the settings scanned)" if at["outside_scanned"] else "")
        for at in facts["settings"]
    ]
    lines += [
        f"{count} pixels: {MEANING[ThresholdFlag[name]]}"
        for name, count in facts["flagged"].items()
    ]
    lines += [f"assumed: {text}" for text in facts["assumptions"]]
    return "\n".join(lines)


def _plain(value: float | None) -> str:
    return "?" if value is None else f"{value:.3f}"


def _pair(middle: dict[str, Any]) -> str:
    return f"{_plain(middle['median'])} ± {_plain(middle['spread'])}"
