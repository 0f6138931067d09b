"""Exposures of a wedge scan that contradict what the scan says of them."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from spectral.calibration.fault_hypotheses import (
    FaultKind,
    departure,
    distance,
    hypotheses,
)
from spectral.calibration.fault_sentences import (
    fault_sentence,
    remark_sentence,
    swap_sentence,
)
from spectral.calibration.output_trend import output_trend
from spectral.calibration.residual import refit_residual
from spectral.calibration.seen_exposure import SeenExposure, look_at, seen_in_fit

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.fault_hypotheses import Hypothesis
    from spectral.calibration.residual import ResidualCorrection
    from spectral.calibration.result import Calibration

__all__ = [
    "LARGEST_SHARE",
    "FaultKind",
    "SeenExposure",
    "StepFault",
    "find_step_faults",
    "look_at",
    "name_faults",
]
FALSE_ALARM = 1e-6
"""Probability that a sound exposure is called faulty, per exposure."""
LARGEST_SHARE = 0.34
"""No more than this share of the exposures can be told from the sound ones."""
AS_GOOD = 12.0
"""Explanations whose score is worse by less are named too."""
SIMPLER_BY = 6.0
"""A hypothesis with one more parameter must lower chi-square by this much."""
UNEXPLAINED = 3.0
"""Chi-square over the limit from which on the best explanation is none."""
TREND_ROUNDS = 3
MAD_TO_SIGMA = 1.4826
"""Standard deviation over median absolute deviation of a normal distribution."""
SPREAD_DOUBT = 2.5
"""By so much over the square root of their number, exposures may understate their
spread: two standard errors of a median absolute deviation."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepFault:
    """One faulty exposure.

    Attributes
    ----------
    exposure : int
        Index in the scan.
    kind : FaultKind
    text : str
        What is wrong and what value would fit, one sentence.
    fitting : array, shape (material,), in g/cm2
        Areal density that fits the counts best.
    output : float
        Factor on the tube's output (current times time) that fits best.
    chi_square : float
        Departure from what the other exposures predict.
    """

    exposure: int
    kind: FaultKind
    text: str
    fitting: NDArray[np.float64]
    output: float
    chi_square: float


def find_step_faults(calibration: Calibration) -> tuple[StepFault, ...]:
    """Exposures that the calibration's other exposures contradict.

    Parameters
    ----------
    calibration : Calibration
        May be spoilt by the very faults: the smooth correction is fitted anew to the
        exposures that agree.

    Returns
    -------
    tuple of StepFault, in the order of the scan

    Notes
    -----
    One exposure after the other leaves, the worst first, as long as a left-out
    exposure departs from the prediction of the rest by more than chi-square allows
    (robustly scaled); then those that left are compared with the final prediction.
    What the tube's output did smoothly in the course of the scan is no fault. How much
    it scatters between exposures is told by the half of them that scatters least: a
    wrong current must not be its own excuse.
    """
    seen = seen_in_fit(calibration)
    bins = seen[0].total.size
    kept = np.ones(len(seen), bool)
    limit = float(chi2.isf(FALSE_ALARM, bins))
    for _ in range(int(LARGEST_SHARE * len(seen))):
        level = _without_trend(calibration, seen, kept)
        form = _steadied(calibration.residual, level, kept)
        away = np.zeros(len(seen))
        for e in np.flatnonzero(kept):
            smooth = _smooth_without(form, level, kept, int(e))
            away[e] = distance(smooth, level[e])
        usual = float(np.median(away[kept])) / chi2.median(bins)
        away /= max(usual, 1.0)
        worst = int(np.argmax(away))
        if away[worst] < limit:
            break
        kept[worst] = False
    level = _without_trend(calibration, seen, kept)
    form = _steadied(calibration.residual, level, kept)
    listed = {one.exposure: one.areal_density for one in seen}
    faults = []
    for e in np.flatnonzero(~kept):
        smooth = _smooth_without(form, level, kept, int(e))
        faults.append(_named(calibration, smooth, level[e], listed))
    return _with_swaps(calibration, [f for f in faults if f is not None], seen)


def name_faults(
    calibration: Calibration, seen: list[SeenExposure]
) -> tuple[StepFault, ...]:
    """Faults of exposures that the calibration did not use; none for sound ones."""
    steps = calibration.steps
    at = np.array([one.exposure for one in seen], np.int64)
    course = output_trend(steps.exposure, np.log1p(steps.drift), at=at)
    level = [
        replace(one, total=one.total - c) for one, c in zip(seen, course, strict=True)
    ]
    used = zip(steps.exposure.tolist(), steps.areal_density, strict=True)
    listed = dict(used) | {one.exposure: one.areal_density for one in seen}
    faults = [_named(calibration, calibration.residual, o, listed) for o in level]
    return _with_swaps(calibration, [f for f in faults if f is not None], seen)


def _steadied(
    form: ResidualCorrection, seen: list[SeenExposure], kept: NDArray[np.bool_]
) -> ResidualCorrection:
    """The correction with no more spread of the output than most exposures show."""
    smooth = _smooth_without(form, seen, kept, -1)
    output = np.array([_output(smooth, one) for e, one in enumerate(seen) if kept[e]])
    spread = MAD_TO_SIGMA * float(np.median(np.abs(output - np.median(output))))
    spread *= 1.0 + SPREAD_DOUBT / np.sqrt(output.size)
    return replace(form, drift_spread=min(form.drift_spread, spread))


def _smooth_without(
    form: ResidualCorrection,
    seen: list[SeenExposure],
    kept: NDArray[np.bool_],
    step: int,
) -> ResidualCorrection:
    """Smooth correction from the kept exposures but one."""
    others = [one for e, one in enumerate(seen) if kept[e] and e != step]
    return refit_residual(
        form,
        np.stack([one.total for one in others]),
        np.stack([one.error for one in others]),
        np.stack([one.areal_density for one in others]),
        np.array([one.current_ma for one in others]),
    )


def _without_trend(
    calibration: Calibration, seen: list[SeenExposure], kept: NDArray[np.bool_]
) -> list[SeenExposure]:
    """The exposures, were the tube's output without its smooth course."""
    place = np.array([one.exposure for one in seen])
    level = seen
    for _ in range(TREND_ROUNDS):
        smooth = _smooth_without(calibration.residual, level, kept, -1)
        output = np.array([_output(smooth, one) for one in level])
        course = output_trend(place[kept], output[kept], at=place)
        # what is common to the whole scan is the calibration's flux
        course -= np.median(course)
        level = [
            replace(one, total=one.total - c)
            for one, c in zip(level, course, strict=True)
        ]
    return level


def _output(smooth: ResidualCorrection, one: SeenExposure) -> float:
    """Logarithm of an exposure's output, as all its bins have it."""
    return float(np.average(departure(smooth, one), weights=1.0 / one.error**2))


def _named(
    calibration: Calibration,
    smooth: ResidualCorrection,
    one: SeenExposure,
    listed: dict[int, NDArray[np.float64]],
) -> StepFault | None:
    """The likeliest explanations of an exposure; None if it needs none after all."""
    at_rest = distance(smooth, one)
    if one.remark:
        return StepFault(
            exposure=one.exposure,
            kind=FaultKind.IMAGE,
            text=remark_sentence(one),
            fitting=one.areal_density,
            output=1.0,
            chi_square=at_rest,
        )
    limit = float(chi2.isf(FALSE_ALARM, one.total.size))
    if at_rest < limit:
        return None
    every = sorted(hypotheses(calibration, smooth, one, listed), key=_score)
    best = every[0]
    explained = best.chi_square < UNEXPLAINED * limit
    plausible = [h for h in every if _is_plausible(h, best)] if explained else []
    return StepFault(
        exposure=one.exposure,
        kind=best.kind if explained else FaultKind.UNKNOWN,
        text=fault_sentence(calibration, one, plausible),
        fitting=best.areal,
        output=best.output,
        chi_square=at_rest,
    )


def _score(what: Hypothesis) -> float:
    return what.chi_square + SIMPLER_BY * what.size


def _is_plausible(what: Hypothesis, best: Hypothesis) -> bool:
    """Whether an explanation is worth naming beside the best."""
    layers = what.kind in (FaultKind.THICKNESS, FaultKind.STACK)
    if layers and best.kind is FaultKind.ANOTHER:
        return False  # it would only say the same again, with an error
    return what.size <= max(best.size, 1) and _score(what) < _score(best) + AS_GOOD


def _with_swaps(
    calibration: Calibration, faults: list[StepFault], seen: list[SeenExposure]
) -> tuple[StepFault, ...]:
    """Pairs whose fitting stacks are each other's become swaps."""
    told = {one.exposure: one for one in seen}

    def crossed(a: StepFault, b: StepFault) -> bool:
        there = a.fitting - told[b.exposure].areal_density
        back = b.fitting - told[a.exposure].areal_density
        stacks = a.kind is b.kind is FaultKind.ANOTHER
        return stacks and not there.any() and not back.any()

    def seen_as_swap(fault: StepFault) -> StepFault:
        partner = next((o for o in faults if crossed(fault, o)), None)
        if partner is None:
            return fault
        text = swap_sentence(calibration, told[fault.exposure], told[partner.exposure])
        return replace(fault, kind=FaultKind.SWAPPED, text=text)

    return tuple(sorted(map(seen_as_swap, faults), key=lambda f: f.exposure))
