"""What a scan's findings mean for its use, in sentences."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.exposure_problems import ExposureProblem, ProblemKind

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from spectral.scans.counting_loss import CountingLoss
    from spectral.scans.dispersion import Dispersion
    from spectral.scans.exposure_levels import ExposureLevels
    from spectral.scans.scan import Scan
    from spectral.scans.threshold_covariance import SharedPulses

_MOST_BAD = 0.2
_MANY_BAD = 0.02
_DRIFT_THAT_MATTERS = 0.01
_LOSS_THAT_MATTERS = 0.2
_DEVIATIONS = 5.0
_DISPERSION_TOLERANCE = 0.1
_DARK_SHARE = 1e-3
_MOST = 0.5
_USELESS = (
    ProblemKind.SATURATED,
    ProblemKind.NOT_COUNTS,
    ProblemKind.ORDER,
    ProblemKind.REPEATED,
    ProblemKind.ROLE,
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Findings:
    """What the check found, before it is put into words.

    Attributes
    ----------
    shared : SharedPulses or None
    drift, drift_error : array, shape (threshold,)
    bad_share : float
        Share of pixels with any reason.
    bad_cause : str
        What most of them have in common.
    """

    scan: Scan
    levels: ExposureLevels
    problems: tuple[ExposureProblem, ...]
    loss: CountingLoss | None
    dispersions: tuple[Dispersion, ...]
    shared: SharedPulses | None
    drift: NDArray[np.float64]
    drift_error: NDArray[np.float64]
    bad_share: float
    bad_cause: str


def verdict_on(findings: Findings) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Why a scan is not fit, and what to mind if it is; one sentence each."""
    return tuple(_causes(findings)), tuple(_exceptions(findings))


def _causes(findings: Findings) -> Iterator[str]:
    """What rules the scan out as it stands."""
    scan, levels = findings.scan, findings.levels
    opens = scan.exposures("open")
    if len(opens) == 0 and not _object_alone(scan):
        yield "there is no open exposure to compare the others with"
    elif len(opens) and levels.mean[opens, 0].max() < 1.0:
        yield _nothing_counted(levels, opens)
    if findings.shared is not None and findings.shared.none:
        yield _per_bin(findings.shared)
    else:
        yield from _order(findings, opens)
    wrong = {p.exposure: p.text for p in findings.problems if p.kind in _USELESS}
    if len(opens) and set(wrong).issuperset(opens.tolist()):
        first = int(opens[0])
        yield (
            "every open exposure has a problem of its own, as exposure "
            f"{first}: {wrong[first]}"
        )
    steps = sorted(set(scan.exposures("wedge").tolist()) - set(wrong))
    if "wedge" in scan.role:
        yield from _steps(scan, steps)
    if findings.bad_share > _MOST_BAD:
        yield f"{findings.bad_share:.0%} of the pixels are bad; of most, {findings.bad_cause}"
    worst = _not_counts(findings.dispersions)
    if worst:
        yield worst


def _object_alone(scan: Scan) -> bool:
    """Whether the scan needs no open exposure: its maps do without."""
    return "object" in scan.role and "wedge" not in scan.role


def _nothing_counted(levels: ExposureLevels, opens: NDArray[np.int64]) -> str:
    """Say why no open exposure counts anything."""
    if np.median(levels.at_limit[opens]) > _MOST:
        return (
            "the counts of the open exposures stand at the limit of the counter or of "
            "the stored numbers; lower the current or store wider numbers"
        )
    if np.median(levels.no_count[opens]) > _MOST:
        return (
            "the open exposures hold negative numbers, NaN or fractions where counts "
            "are needed; store the counts as the detector gave them"
        )
    return "no open exposure counts anything"


def _order(findings: Findings, opens: NDArray[np.int64]) -> Iterator[str]:
    """Thresholds that count more than the one below."""
    scan = findings.scan
    falls = np.diff(findings.levels.mean[opens].sum(0)) if len(opens) else np.zeros(0)
    if np.any(falls > 0):
        k = int(np.argmax(falls > 0))
        low, high = scan.thresholds_kev[k : k + 2]
        yield (
            f"the threshold at {high:g} keV counts more than the one at {low:g} keV: "
            "are they in the right order, and are these counts above thresholds, not "
            "per bin?"
        )
        return
    lit = [i for i, role in enumerate(scan.role) if role != "dark"]
    kinds = {p.exposure for p in findings.problems if p.kind is ProblemKind.ORDER}
    rising = kinds.intersection(lit)
    if len(rising) > _MOST * len(lit):
        yield (
            f"in {len(rising)} of {len(lit)} exposures with a beam many pixels count "
            "more above a higher threshold than above a lower one: are these counts "
            "per bin? Store the counts above each threshold"
        )


def _per_bin(shared: SharedPulses) -> str:
    """Say that thresholds count different pulses."""
    return (
        f"the repeats {_listed(sorted(shared.exposures))} show that neighbouring "
        f"thresholds share {max(shared.share, 0.0):.0%} of the pulses that they must: "
        "unless most pulses are lost to dead time, these are counts per bin, or "
        "thresholds exposed one after the other; store the counts above each "
        "threshold, of one exposure"
    )


def _steps(scan: Scan, steps: list[int]) -> Iterator[str]:
    """What is missing among the wedge exposures that can be used."""
    if len(steps) < len(scan.materials):
        yield (
            f"{len(steps)} usable wedge exposures are too few for "
            f"{len(scan.materials)} materials"
        )
        return
    never = [
        layer.name
        for layer, mm in zip(scan.materials, scan.thickness_mm[steps].T, strict=True)
        if not np.any(mm > 0)
    ]
    if never:
        yield f"no usable wedge exposure holds {' or '.join(never)}; add some"


def _not_counts(dispersions: tuple[Dispersion, ...]) -> str:
    """A sentence if repeats scatter far less than counts can, "" otherwise."""
    for one in dispersions:
        short = one.ratio < 0.5 * one.expected - _DEVIATIONS * one.standard_error
        if np.any(short):
            k = int(np.argmax(short))
            return (
                f"the repeats {_listed(one.exposures)} scatter by {one.ratio[k]:.2f} "
                f"of what dead time leaves ({one.expected[k]:.2f} of the Poisson "
                "variance): these are smoothed or averaged images, not counts"
            )
    return ""


def _exceptions(findings: Findings) -> Iterator[str]:
    """What the user should mind."""
    scan = findings.scan
    if "dark" not in scan.role:
        yield "there is no dark exposure, so noisy pixels may go unseen"
    if len(scan.exposures("open")) == 0 and _object_alone(scan):
        yield (
            "there is no open exposure: the tube's output will be taken as it was "
            "during the wedge scan, and its drift passes for a change of the object"
        )
    if len(scan.exposures("open")) == 1:
        yield "there is one open exposure only, so drift and flicker stay unknown"
    if "wedge" in scan.role and findings.loss is None:
        yield "no two currents with open beam: the dead time is not measured"
    if findings.bad_share > 0:
        share = f"{findings.bad_share:.2%}"
        many = ", which is many" if findings.bad_share > _MANY_BAD else ""
        yield f"{share} of the pixels are bad{many}: leave them out"
    yield from _dark(findings)
    yield from _drift(findings)
    if findings.loss is not None and findings.loss.loss > _LOSS_THAT_MATTERS:
        yield (
            f"{findings.loss.loss:.0%} of the pulses are lost in the open beam: "
            "a lower current would be safer"
        )
    yield from _dispersion(findings.dispersions)
    troubled = sorted({p.exposure for p in findings.problems})
    if troubled:
        word = "exposure" if len(troubled) == 1 else "exposures"
        yield f"{word} {_listed(troubled)} should be looked at"


def _dark(findings: Findings) -> Iterator[str]:
    scan, levels = findings.scan, findings.levels
    dark, opens = scan.exposures("dark"), scan.exposures("open")
    if len(dark) == 0 or len(opens) == 0:
        return
    without = levels.mean[dark].sum(0) / scan.count_time_s[dark].sum()
    with_beam = levels.mean[opens].sum(0) / scan.count_time_s[opens].sum()
    much = without > _DARK_SHARE * with_beam
    if much.any():
        k = int(np.argmax(without / np.maximum(with_beam, 1e-9)))
        yield (
            f"sound pixels count {without[k]:.3g} /s in the dark above "
            f"{scan.thresholds_kev[k]:g} keV"
        )


def _drift(findings: Findings) -> Iterator[str]:
    size = np.abs(findings.drift)
    certain = size > _DEVIATIONS * findings.drift_error
    if np.any(certain & (size > _DRIFT_THAT_MATTERS)):
        k = int(np.nanargmax(np.where(certain, size, -1.0)))
        yield (
            f"from the first to the last open exposure the counts above "
            f"{findings.scan.thresholds_kev[k]:g} keV change by "
            f"{findings.drift[k]:+.1%}"
        )


def _dispersion(dispersions: tuple[Dispersion, ...]) -> Iterator[str]:
    """Say for the worst setting if repeats scatter unlike counts."""
    worst, text = 0.0, ""
    for one in dispersions:
        off = np.nan_to_num(one.ratio - one.expected)
        certain = np.abs(off) > np.maximum(
            _DISPERSION_TOLERANCE, _DEVIATIONS * np.nan_to_num(one.standard_error)
        )
        size = np.where(certain, np.abs(off), 0.0)
        if size.max() > worst:
            worst, k = float(size.max()), int(np.argmax(size))
            text = (
                f"the repeats {_listed(one.exposures)} have {one.ratio[k]:.2f} times "
                f"the Poisson variance, {one.expected[k]:.2f} is expected"
            )
    if text:
        yield text


def _listed(numbers: tuple[int, ...] | list[int]) -> str:
    """Return a few numbers as text, the middle of a long list left out."""
    if len(numbers) > 6:
        head = ", ".join(str(n) for n in numbers[:3])
        return f"{head}, ..., {numbers[-1]}"
    return ", ".join(str(n) for n in numbers)
