"""Whether a scan is fit for use, and what is wrong with it.

The check describes the data. It decides nothing about the thing that was scanned,
nor about the equipment's safety.
"""

from __future__ import annotations

import enum
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.bad_pixels import (
    PixelReason,
    commonest_reason,
    find_bad_pixels,
)
from spectral.scans.counting_loss import CountingLoss, counting_loss
from spectral.scans.dispersion import Dispersion, dispersions
from spectral.scans.exposure_levels import ExposureLevels, exposure_levels
from spectral.scans.exposure_problems import (
    ExposureProblem,
    ProblemKind,
    exposure_problems,
)
from spectral.scans.repeats import settings_with_repeats, usable_exposures
from spectral.scans.scan_verdict import Findings, verdict_on
from spectral.scans.threshold_covariance import shared_pulses

if TYPE_CHECKING:
    from collections.abc import Callable, Collection, Sequence

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan


class Verdict(enum.Enum):
    """What the data allow."""

    FIT = "fit"
    EXCEPTIONS = "fit with these exceptions"
    NOT_FIT = "not fit"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ThresholdCheck:
    """What one threshold counts, over the sound pixels.

    Attributes
    ----------
    threshold_kev : float
    dark_rate_per_s : float
        Mean counts per second and pixel without beam; NaN without dark exposures.
    open_counts : float
        Mean of the brightest open exposures; NaN without open exposures.
    spread : float
        Robust relative standard deviation from pixel to pixel, noise taken out.
    drift : float
        Last over first open exposure of one setting, minus 1; NaN without two.
    drift_error : float
        Its standard deviation from counting.
    """

    threshold_kev: float
    dark_rate_per_s: float
    open_counts: float
    spread: float
    drift: float
    drift_error: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ScanCheck:
    """The result of a check.

    Attributes
    ----------
    source : str
    shape : (exposure, threshold, row, column)
    roles : dict of str to int
        How many exposures have each role.
    verdict : Verdict
    causes : tuple of str
        Why the scan is not fit, one sentence each.
    exceptions : tuple of str
        What to mind if it is, one sentence each.
    thresholds : tuple of ThresholdCheck
    dispersions : tuple of Dispersion
    loss : CountingLoss or None
        None unless there are open exposures at two currents.
    problems : tuple of ExposureProblem
    reasons : array of uint16, shape (row, column)
        Bits of `PixelReason`.
    notes : tuple of str
        What was assumed where the scan is silent.
    """

    source: str
    shape: tuple[int, int, int, int]
    roles: dict[str, int]
    verdict: Verdict
    causes: tuple[str, ...]
    exceptions: tuple[str, ...]
    thresholds: tuple[ThresholdCheck, ...]
    dispersions: tuple[Dispersion, ...]
    loss: CountingLoss | None
    problems: tuple[ExposureProblem, ...]
    reasons: NDArray[np.uint16]
    notes: tuple[str, ...]

    @property
    def pixels_by_reason(self) -> dict[str, int]:
        """How many pixels have each reason; a pixel may have several."""
        counted = {
            str(reason.name): int(np.count_nonzero(self.reasons & reason))
            for reason in PixelReason
            if reason
        }
        return {name: number for name, number in counted.items() if number}

    @property
    def bad_pixels(self) -> int:
        """How many pixels have any reason."""
        return int(np.count_nonzero(self.reasons))


def check_scan(
    scan: Scan,
    *,
    known: Sequence[str] = (),
    progress: Callable[[int, int], None] | None = None,
) -> ScanCheck:
    """Check a scan for what a calibration or a decomposition needs of it.

    Parameters
    ----------
    scan : Scan
        Read one exposure at a time, but for the part that bad pixels need.
    known : sequence of str, optional
        What is known already to rule the scan out, one sentence each, as
        `spectral.forward.step_thickness.wedge_faults` says of a wedge scan.
    progress : callable, optional
        Called with the exposures done and their number.
    """
    reasons = find_bad_pixels(scan, object_repeats=True)
    sound = reasons == 0
    if not sound.any():
        sound = ~sound
    levels = exposure_levels(scan, sound, progress=progress)
    problems = exposure_problems(scan, levels)
    troubled = {p.exposure for p in problems}
    loss = counting_loss(scan, sound, without=troubled)
    dead_time = loss.median_ns if loss is not None else 0.0
    spread_tests = dispersions(scan, sound, dead_time_ns=dead_time, without=troubled)
    thresholds = _thresholds(scan, levels, sound, troubled)
    unlike = {p.exposure for p in problems if p.kind is not ProblemKind.ORDER}
    causes, exceptions = verdict_on(
        Findings(
            scan=scan,
            levels=levels,
            problems=tuple(problems),
            loss=loss,
            dispersions=tuple(spread_tests),
            shared=shared_pulses(scan, sound, without=unlike),
            drift=np.array([t.drift for t in thresholds]),
            drift_error=np.array([t.drift_error for t in thresholds]),
            bad_share=float(np.mean(reasons != 0)),
            bad_cause=commonest_reason(reasons),
        )
    )
    causes = (*known, *causes)
    verdict = Verdict.EXCEPTIONS if exceptions else Verdict.FIT
    return ScanCheck(
        source=scan.source,
        shape=scan.shape,
        roles={r: scan.role.count(r) for r in dict.fromkeys(scan.role)},
        verdict=Verdict.NOT_FIT if causes else verdict,
        causes=causes,
        exceptions=exceptions,
        thresholds=thresholds,
        dispersions=tuple(spread_tests),
        loss=loss,
        problems=tuple(problems),
        reasons=reasons,
        notes=scan.notes,
    )


def _thresholds(
    scan: Scan,
    levels: ExposureLevels,
    sound: NDArray[np.bool_],
    without: Collection[int],
) -> tuple[ThresholdCheck, ...]:
    """Dark counts, level, spread and drift of each threshold."""
    k = scan.shape[1]
    dark = usable_exposures(scan, "dark", without=without)
    rate = np.full(k, np.nan)
    if len(dark):
        rate = levels.mean[dark].sum(0) / scan.count_time_s[dark].sum()
    bright = _brightest_opens(scan, levels, without)
    counts, spread, drift, error = np.full((4, k), np.nan)
    if len(bright):
        counts = levels.mean[bright].mean(0)
        image = scan.counts.read(bright)[:, :, sound].sum(0, dtype=np.float64)
        spread = _spread(image)
    if len(bright) > 1:
        first, last = levels.mean[bright[0]], levels.mean[bright[-1]]
        drift = last / np.maximum(first, 1e-9) - 1.0
        error = np.sqrt(2.0 / np.maximum(first * levels.pixels, 1.0))
    return tuple(
        ThresholdCheck(
            threshold_kev=float(scan.thresholds_kev[i]),
            dark_rate_per_s=float(rate[i]),
            open_counts=float(counts[i]),
            spread=float(spread[i]),
            drift=float(drift[i]),
            drift_error=float(error[i]),
        )
        for i in range(k)
    )


def _brightest_opens(
    scan: Scan, levels: ExposureLevels, without: Collection[int]
) -> NDArray[np.int64]:
    """Open exposures of the brightest setting, in order."""
    groups = settings_with_repeats(scan, "open", fewest=1, without=without)
    if not groups:
        return np.zeros(0, np.int64)
    return max(groups, key=lambda group: float(levels.mean[group, 0].mean()))


def _spread(image: NDArray[np.float64]) -> NDArray[np.float64]:
    """Robust relative spread between pixels, without counting noise.

    Parameters
    ----------
    image : array, shape (threshold, pixel)
        Total counts.
    """
    if image.shape[1] < 2:
        return np.full(len(image), np.nan)
    middle = np.median(image, axis=1)
    deviation = np.abs(image - middle[:, None])
    spread = 1.4826 * np.median(deviation, axis=1) / np.maximum(middle, 1e-9)
    noise = 1.0 / np.maximum(middle, 1.0)
    out: NDArray[np.float64] = np.sqrt(np.maximum(spread**2 - noise, 0.0))
    return out
