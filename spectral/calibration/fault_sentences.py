"""Sentences about a faulty exposure: what the scan says, and what would fit."""

from __future__ import annotations

from typing import TYPE_CHECKING

from spectral.calibration.fault_hypotheses import FaultKind

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from spectral.calibration.fault_hypotheses import Hypothesis
    from spectral.calibration.result import Calibration
    from spectral.calibration.seen_exposure import SeenExposure

SAME_SHARE = 1.0
"""Current and count time are one explanation if they agree to so many errors."""


def remark_sentence(one: SeenExposure) -> str:
    """The sentence for an exposure whose stored image speaks for itself."""
    return f"exposure {one.exposure}: {one.remark}"


def swap_sentence(
    calibration: Calibration, one: SeenExposure, other: SeenExposure
) -> str:
    """The sentence for an exposure whose stack is another faulty one's."""
    said = stack_words(calibration, one.areal_density)
    fits = stack_words(calibration, other.areal_density)
    return (
        f"exposure {one.exposure}: swapped with exposure {other.exposure}; the scan "
        f"says {said}; the counts fit {fits}"
    )


def fault_sentence(
    calibration: Calibration, one: SeenExposure, plausible: list[Hypothesis]
) -> str:
    """The sentence for an exposure with its explanations, the likeliest first."""
    said = stack_words(calibration, one.areal_density)
    start = f"exposure {one.exposure}: the scan says {said}"
    if not plausible:
        return f"{start}; no stack, no threshold and no tube output explains its counts"
    first, *others = _merged(plausible)
    text = f"{start}; the counts fit {_words(calibration, one, first)}"
    if others:
        text += f" (or {'; or '.join(_words(calibration, one, o) for o in others)})"
    return text


def stack_words(
    calibration: Calibration,
    areal: NDArray[np.float64],
    error: NDArray[np.float64] | None = None,
) -> str:
    """Layers in mm, "an open beam" if there is none."""
    if not areal.any() and (error is None or not error.any()):
        return "an open beam"
    parts = []
    for m, layer in enumerate(calibration.materials):
        scale = 10.0 / layer.density_g_cm3
        wide = 0.0 if error is None else scale * error[m]
        thick = scale * areal[m]
        if wide > 0.0:
            parts.append(f"{thick:.3f} +- {max(wide, 1e-3):.3f} mm {layer.name}")
        elif thick > 0.0:
            parts.append(f"{thick:.3g} mm {layer.name}")
    return " + ".join(parts)


def _merged(plausible: list[Hypothesis]) -> list[Hypothesis]:
    """Count time is dropped where the current says the same."""
    current = next((h for h in plausible if h.kind is FaultKind.OUTPUT), None)
    if current is None:
        return plausible
    near = SAME_SHARE * current.output_error
    return [
        h
        for h in plausible
        if h.kind is not FaultKind.TIME or abs(h.output - current.output) > near
    ]


def _words(calibration: Calibration, one: SeenExposure, what: Hypothesis) -> str:
    if what.kind is FaultKind.OUTPUT or what.kind is FaultKind.TIME:
        share = f"{100 * what.output:.1f} +- {max(100 * what.output_error, 0.1):.1f} %"
        if what.kind is FaultKind.TIME:
            seconds = what.output * one.count_time_s
            return f"{share} of that count time ({seconds:.3g} s)"
        now = what.output * one.current_ma
        return f"{share} of that tube output ({now:.3g} mA, or as much in time)"
    if what.kind is FaultKind.THRESHOLD:
        return (
            f"thresholds {what.shift_kev:+.2f} +- {max(what.shift_error, 0.01):.2f} "
            "keV from the others'"
        )
    words = stack_words(calibration, what.areal, what.areal_error)
    if what.kind is FaultKind.ANOTHER and what.areal.any():
        return f"{words}, the stack of exposure {', '.join(map(str, what.like))}"
    return words
