"""Exposures that do not fit what the scan says of them."""

from __future__ import annotations

import enum
from dataclasses import dataclass
from itertools import combinations_with_replacement
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.repeats import settings_with_repeats, usable_exposures

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from spectral.scans.exposure_levels import ExposureLevels
    from spectral.scans.scan import Scan

_SHARE_THAT_MATTERS = 0.01
_DARK_SHARE_OF_OPEN = 0.01
_LEVEL_TOLERANCE = 0.05
_DEVIATIONS = 8.0
_ABSOLUTE_ROUNDS = 30
_COMMON_FACTOR = 0.25
#: For each order of the law of the steps: the smallest departure that matters.
#: A stiffer law fits worse, but a step at the rim cannot bend it to itself.
_TOLERANCE = {3: 0.05, 2: 0.1, 1: 0.3}


class ProblemKind(enum.Enum):
    """What is wrong with an exposure."""

    SATURATED = "saturated"
    NOT_COUNTS = "not counts"
    ORDER = "threshold order"
    REPEATED = "repeated"
    ROLE = "role"
    LEVEL = "level"
    LABEL = "layers"
    DISAGREES = "unlike its repeats"


@dataclass(frozen=True, slots=True, kw_only=True)
class ExposureProblem:
    """A problem of one exposure, and one sentence about it."""

    exposure: int
    kind: ProblemKind
    text: str


def exposure_problems(scan: Scan, levels: ExposureLevels) -> list[ExposureProblem]:
    """Problems of a scan's exposures, in the order of the scan.

    Parameters
    ----------
    scan : Scan
    levels : ExposureLevels
    """
    found = [
        *_count_faults(levels),
        *_copies(scan, levels),
        *_roles(scan, levels),
    ]
    excluded = {p.exposure for p in found if p.kind is not ProblemKind.REPEATED}
    steps = list(_steps(scan, levels, excluded))
    found += steps
    excluded |= {p.exposure for p in steps}
    found += _repeats(scan, levels, excluded)
    return sorted(found, key=lambda p: p.exposure)


def _count_faults(levels: ExposureLevels) -> Iterator[ExposureProblem]:
    """Exposures in which more than one pixel in a hundred has counts that cannot be."""
    for kind, shares, words in (
        (ProblemKind.SATURATED, levels.at_limit, "stand at the counter's limit"),
        (ProblemKind.NOT_COUNTS, levels.no_count, "hold no count"),
        (ProblemKind.ORDER, levels.rising, "count more above a higher threshold"),
    ):
        for i in np.flatnonzero(shares > _SHARE_THAT_MATTERS).tolist():
            text = f"{shares[i]:.0%} of the pixels {words}"
            yield ExposureProblem(exposure=i, kind=kind, text=text)


def _copies(scan: Scan, levels: ExposureLevels) -> Iterator[ExposureProblem]:
    """Exposures that are another one bit by bit, which noise does not allow."""
    first: dict[str, int] = {}
    for i, print_ in enumerate(levels.fingerprint):
        if levels.mean[i].max() < 1.0:
            continue
        if print_ in first:
            j = first[print_]
            text = f"its counts are those of exposure {j} ({scan.role[j]}) bit by bit"
            yield ExposureProblem(exposure=i, kind=ProblemKind.REPEATED, text=text)
        first.setdefault(print_, i)


def _roles(scan: Scan, levels: ExposureLevels) -> Iterator[ExposureProblem]:
    """Exposures whose counts contradict their role, or the current."""
    rate = levels.mean[:, 0] / scan.count_time_s
    lit = [i for i, role in enumerate(scan.role) if role in ("open", "wedge")]
    usual = float(np.median(rate[lit])) if lit else 0.0
    if usual <= 0:
        return
    for i, role in enumerate(scan.role):
        text = ""
        current = None if scan.current_ma is None else scan.current_ma[i]
        if role == "dark" and rate[i] > _DARK_SHARE_OF_OPEN * usual:
            text = f"a dark exposure counts {rate[i]:.3g} /s in each pixel"
        elif role == "open" and rate[i] < _DARK_SHARE_OF_OPEN * usual:
            text = "an open exposure counts next to nothing"
        elif role != "dark" and current == 0 and rate[i] > 0:
            text = "it has counts, but its tube current is given as zero"
        if text:
            yield ExposureProblem(exposure=i, kind=ProblemKind.ROLE, text=text)


def _steps(
    scan: Scan, levels: ExposureLevels, excluded: set[int]
) -> Iterator[ExposureProblem]:
    """Open and wedge exposures that leave the smooth law of the others."""
    which = usable_exposures(scan, "open", "wedge", without=excluded)
    which = which[levels.mean[which].min(axis=1) > 0]
    output = scan.count_time_s.copy()
    if scan.current_ma is not None:
        output = output * scan.current_ma
    height = np.log(levels.mean[which] / output[which, None])
    noise = 1.0 / np.sqrt(levels.mean[which] * levels.pixels)
    found: dict[int, NDArray[np.float64]] = {}
    for order, tolerance in _TOLERANCE.items():
        left = np.array([j for j in range(len(which)) if j not in found], np.int64)
        terms = _terms(scan, which[left], height[left, 0], order)
        if terms is not None:
            off = outliers(terms, height[left], noise[left], tolerance=tolerance)
            found |= {int(left[j]): departure for j, departure in off}
    for j, departure in found.items():
        yield _departure(int(which[j]), departure)


def _departure(exposure: int, off: NDArray[np.float64]) -> ExposureProblem:
    """A step that leaves the law of the others, with the likely cause."""
    common = float(np.median(off))
    if np.ptp(off) < _COMMON_FACTOR * abs(common):
        kind = ProblemKind.LEVEL
        text = (
            f"it counts {np.exp(common):.2f} times what the other exposures lead to "
            "expect, at every threshold: are count time, current and layers right?"
        )
    else:
        kind = ProblemKind.LABEL
        text = (
            f"it counts {np.exp(off[0]):.2f} to {np.exp(off[-1]):.2f} times what the "
            "other exposures lead to expect, lowest to highest threshold: are its "
            "layers right?"
        )
    return ExposureProblem(exposure=exposure, kind=kind, text=text)


def _terms(
    scan: Scan, which: NDArray[np.int64], height: NDArray[np.float64], order: int
) -> NDArray[np.float64] | None:
    """Powers of the thicknesses, and the rate they lead to, one row an exposure.

    None if there are too few exposures for the check. The rate is the fitted one, so
    that an exposure with a wrong level cannot excuse itself by it.
    """
    thickness = scan.thickness_mm[which]
    layers = [one / one.max() for one in thickness.T if one.any()]
    current = None if scan.current_ma is None else scan.current_ma[which]
    columns = [np.ones(len(which))]
    for power in range(1, order + 1):
        chosen = combinations_with_replacement(layers, power)
        columns += [np.prod(factors, axis=0) for factors in chosen]
    terms = np.stack(columns, axis=1)
    if len(which) < terms.shape[1] + 4 + len(which) // 5:
        return None
    if current is not None and len(np.unique(current)) > 1:
        fitted = terms @ np.linalg.lstsq(terms, height, rcond=None)[0]
        rate = current * np.exp(fitted)
        terms = np.column_stack([terms, rate / rate.max()])
    return terms


def outliers(
    terms: NDArray[np.float64],
    height: NDArray[np.float64],
    noise: NDArray[np.float64],
    *,
    tolerance: float,
) -> list[tuple[int, NDArray[np.float64]]]:
    """Rows that leave the law of the others, one after the other, worst first.

    Parameters
    ----------
    terms : array, shape (exposure, term)
    height : array, shape (exposure, threshold)
        Natural logarithms.
    noise : array, shape (exposure, threshold)
        Their standard deviation from counting.
    tolerance : float
        Smallest departure that matters.

    Returns
    -------
    list of (row, departure at each threshold)
        The departure is that of the row from the law fitted without it.

    Notes
    -----
    A first fit by least absolute residuals finds gross outliers even where several
    would hide each other; then deleted residuals of least squares, e / (1 - h), find
    those that bend the law to themselves. A row goes when it departs by more than the
    tolerance and by eight robust standard deviations of the rows that stay.
    Source: R. D. Cook, S. Weisberg 1982, Residuals and Influence in Regression,
    ch. 2 (from memory).
    """
    most = len(height) // 5
    gone = _gross(terms, height, tolerance)[:most]
    while True:
        rest = np.setdiff1d(np.arange(len(height)), gone)
        if len(gone) >= most or len(rest) < terms.shape[1] + 3:
            break
        score, _ = _departures(terms, height, noise, rest, rest, tolerance)
        if score.max() < _DEVIATIONS:
            break
        gone.append(int(rest[np.argmax(score)]))
    if not gone:
        return []
    score, departure = _departures(
        terms, height, noise, rest, np.array(gone), tolerance
    )
    return [
        (row, off)
        for row, off, beyond in zip(gone, departure, score, strict=True)
        if beyond >= _DEVIATIONS
    ]


def _departures(
    terms: NDArray[np.float64],
    height: NDArray[np.float64],
    noise: NDArray[np.float64],
    rest: NDArray[np.int64],
    rows: NDArray[np.int64],
    tolerance: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Departure of rows from a fit to the rest, each row's own part in it undone.

    Returns
    -------
    score : array, shape (row,)
        The largest of all thresholds in robust standard deviations; 0 below the
        tolerance.
    departure : array, shape (row, threshold)
    """
    inverse = np.linalg.pinv(terms[rest])
    law = inverse @ height[rest]
    leverage = ((terms @ inverse) ** 2).sum(axis=1)
    own = np.maximum(1.0 - leverage[rest], 1e-6)[:, None]
    student = np.abs(height[rest] - terms[rest] @ law) / np.sqrt(own)
    scale = np.maximum(1.4826 * np.median(student, axis=0), noise[rows])
    fitted = np.isin(rows, rest)
    free = np.where(fitted, np.maximum(1.0 - leverage[rows], 1e-6), 1.0)[:, None]
    departure = (height[rows] - terms[rows] @ law) / free
    width = np.where(fitted[:, None], 1.0 / np.sqrt(free), 1.0 + leverage[rows, None])
    score = (np.abs(departure) / (scale * width)).max(axis=1)
    score[(np.abs(departure) < tolerance).all(axis=1)] = 0.0
    return score, departure


def _gross(
    terms: NDArray[np.float64], height: NDArray[np.float64], tolerance: float
) -> list[int]:
    """Rows far from a fit by least absolute residuals, the farthest first."""
    beyond = np.zeros(len(height))
    for one in height.T:
        weight = np.ones(len(one))
        left = one
        for _ in range(_ABSOLUTE_ROUNDS):
            law = np.linalg.lstsq(terms * weight[:, None], one * weight, rcond=None)[0]
            left = np.abs(one - terms @ law)
            weight = 1.0 / np.sqrt(np.maximum(left, 1e-4))
        # as many residuals as there are terms vanish in such a fit
        usual = float(np.median(np.sort(left)[terms.shape[1] :]))
        beyond = np.maximum(beyond, left / max(tolerance, _DEVIATIONS * usual))
    far = np.flatnonzero(beyond > 1.0)
    return [int(j) for j in far[np.argsort(-beyond[far])]]


def _repeats(
    scan: Scan, levels: ExposureLevels, excluded: set[int]
) -> Iterator[ExposureProblem]:
    """Open, wedge and object exposures far from the repeats of their setting."""
    roles = ("open", "wedge", "object")
    for group in settings_with_repeats(scan, *roles, without=excluded):
        rest = group.tolist()
        mean = levels.mean[rest]
        usual = np.median(mean, axis=0) if len(rest) > 2 else mean[0]
        noise = np.sqrt(np.maximum(usual, 1.0) / levels.pixels)
        for i, one in zip(rest, mean, strict=True):
            ratio = one[0] / max(usual[0], 1e-9)
            certain = abs(one[0] - usual[0]) > _DEVIATIONS * noise[0]
            if certain and abs(ratio - 1.0) > _LEVEL_TOLERANCE:
                others = ", ".join(str(j) for j in rest if j != i)
                text = f"it counts {ratio:.2f} times what its repeats do ({others})"
                yield ExposureProblem(exposure=i, kind=ProblemKind.DISAGREES, text=text)
