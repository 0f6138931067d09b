"""The pattern that a calibration leaves between pixels, against the wedge's exposure.

One long wedge scan is thinned event by event (binomially, bin by bin) to shorter ones,
each is calibrated on, and one long object scan is decomposed with each calibration:
with four open exposures of its own that are long, and with one that is as short as a
wedge exposure. The object's own open exposures sharpen the pixels, so that only the
second curve shows what the wedge scan alone gives.

    python -m tests.benchmarks.fixed_pattern [--pixels 18] [--folder F] [--picture P.png]

Exposure 1 is a wedge exposure of 20 000 counts in the open beam, and "one error" the
standard deviation of one pixel in one such exposure of the object. With ``--folder``
the simulated counts are kept there and used again.
"""

from __future__ import annotations

import argparse
import pickle
import sys
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import nnls

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.calibration.promise import pattern_of_shifts
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.scans.scan import CountsInMemory
from tests.benchmarks.nine_regions import bound, expose, score
from tests.benchmarks.other_detectors import CASES, instrument
from tests.benchmarks.pattern_picture import draw
from tests.benchmarks.witness_table import SEED

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan
    from tests.benchmarks.nine_regions import NineRegions

CASE = next(case for case in CASES if case.name == "CdTe")
LONGEST = 16.0
EXPOSURES = tuple(LONGEST / 2.0**i for i in range(8))
OBJECT, REPEATS = 64.0, 4
"""Count time of an object exposure over that of exposure 1; and their number."""
OPEN = 16.0
FIT_FROM = 0.5
"""Exposures below, whose pixels are told by their spread rather than by their counts,
do not tell the square root's law."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Curve:
    """Fixed pattern of both ways of taking the object's open exposures.

    Attributes
    ----------
    label : str
    exposure : array, shape (case,)
    found, error, stated : arrays, shape (case, material), in single errors
        As the object shows, its standard error, and by the maps' calibration errors.
    """

    label: str
    exposure: NDArray[np.float64]
    found: NDArray[np.float64]
    error: NDArray[np.float64]
    stated: NDArray[np.float64]

    def law(self) -> NDArray[np.float64]:
        """Squares of floor and of the part that falls, shape (2, material).

        Of found^2 = floor^2 + part^2 / exposure.
        """
        use = self.exposure >= FIT_FROM
        terms = np.stack([np.ones(use.sum()), 1.0 / self.exposure[use]], axis=1)
        fits = []
        for found, error in zip(self.found[use].T, self.error[use].T, strict=True):
            weight = 1.0 / (2.0 * found * error)
            fits.append(nnls(terms * weight[:, None], found**2 * weight)[0])
        return np.stack(fits, axis=1)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scans:
    """The long scans: wedge and object."""

    wedge: Scan
    known: NineRegions


def simulated(pixels: int, folder: Path | None) -> Scans:
    """The long scans, from a file of our own if they were simulated before."""
    file = None if folder is None else folder / f"pattern_{pixels}.pickle"
    if file is not None and file.exists():
        wedge, known = pickle.loads(file.read_bytes())
        return Scans(wedge=wedge, known=known)
    usual = instrument(CASE, pixels=pixels)
    longer = replace(usual, full_s=LONGEST * usual.full_s)
    made = Scans(
        wedge=longer.wedge_scan().scan,
        known=expose(
            usual, repeats=REPEATS, times=OBJECT, seed=SEED + 3, opens=[OPEN] * 4
        ),
    )
    if file is not None:
        file.write_bytes(pickle.dumps((made.wedge, made.known)))
    return made


def thinned(scan: Scan, share: NDArray[np.float64], rng: np.random.Generator) -> Scan:
    """The scan as if each exposure had lasted this share of its time.

    Every event stays with the probability ``share``, shape (exposure,).
    """
    above = scan.counts.read(range(scan.shape[0])).astype(np.int64)
    bins = above - np.concatenate([above[:, 1:], np.zeros_like(above[:, :1])], axis=1)
    kept = rng.binomial(np.maximum(bins, 0), share[:, None, None, None])
    counts = kept[:, ::-1].cumsum(axis=1)[:, ::-1]
    return replace(
        scan,
        counts=CountsInMemory(counts.astype(np.uint32)),
        count_time_s=scan.count_time_s * share,
        digest="",
    )


def with_short_open(known: NineRegions, exposure: float, seed: int) -> NineRegions:
    """The object scan with its first open exposure alone, shortened to ``exposure``."""
    scan = known.scan
    opens = scan.exposures("open")
    share = np.ones(scan.shape[0])
    share[opens] = exposure / OPEN
    short = thinned(scan, share, np.random.default_rng(seed))
    return replace(known, scan=_without(short, opens[1:]))


def _without(scan: Scan, left: NDArray[np.int64]) -> Scan:
    """The scan without some exposures."""
    keep = np.setdiff1d(np.arange(scan.shape[0]), left)
    assert scan.current_ma is not None
    return replace(
        scan,
        counts=CountsInMemory(scan.counts.read(keep)),
        role=tuple(scan.role[int(i)] for i in keep),
        thickness_mm=scan.thickness_mm[keep],
        count_time_s=scan.count_time_s[keep],
        current_ma=scan.current_ma[keep],
    )


def pattern(
    calibration: Calibration, known: NineRegions
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Found pattern, its error and the stated one (3, material); error in g/cm2."""
    decomposer = MaterialDecomposer(calibration)
    maps = decomposer.decompose(known.scan)
    smallest = bound(decomposer, known)
    single = np.sqrt(OBJECT * np.nanmean(smallest**2, axis=(1, 2)))
    figures = [
        (s.pattern, s.pattern_error, s.stated) for s in score(maps, known, smallest)
    ]
    return np.array(figures).T / np.sqrt(OBJECT), single


def measure(
    scans: Scans, exposures: Sequence[float] = EXPOSURES
) -> tuple[tuple[Curve, Curve], NDArray[np.float64], Calibration, NDArray[np.float64]]:
    """Both curves, the promise (case, material), the longest calibration, one error."""
    labels = "its own open exposures long", "one short open exposure"
    rows: tuple[list[NDArray[np.float64]], ...] = ([], [])
    promised, longest, single = [], None, np.empty(0)
    for number, exposure in enumerate(exposures):
        share = np.full(scans.wedge.shape[0], exposure / LONGEST)
        wedge = thinned(scans.wedge, share, np.random.default_rng(100 + number))
        made = WedgeCalibrator(faults="keep").fit(wedge).calibration_
        assert made.promise is not None
        promised.append(made.promise.fixed_pattern / np.sqrt(exposure))
        short = with_short_open(scans.known, exposure, 200 + number)
        for row, known in zip(rows, (scans.known, short), strict=True):
            figures, single = pattern(made, known)
            row.append(figures)
        longest = made if longest is None else longest
        sys.stderr.write(f"exposure {exposure:g}: {rows[1][-1][0]}\n")
    assert longest is not None
    first, second = (
        Curve(
            label=label,
            exposure=np.array(exposures),
            found=np.array(row)[:, 0],
            error=np.array(row)[:, 1],
            stated=np.array(row)[:, 2],
        )
        for label, row in zip(labels, rows, strict=True)
    )
    return (first, second), np.array(promised), longest, single


def main() -> None:
    """Print the table and draw the picture."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pixels", type=int, default=18)
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--picture", type=Path, default=Path("fixed_pattern.png"))
    options = parser.parse_args()
    scans = simulated(options.pixels, options.folder)
    curves, promised, longest, single = measure(scans)
    names = [layer.name for layer in longest.materials]
    sys.stdout.write(table(curves, promised, names))
    sys.stdout.write(floors(curves[-1], longest, single, names))
    draw(curves, promised, names, options.picture)


def table(
    curves: Sequence[Curve], promised: NDArray[np.float64], names: Sequence[str]
) -> str:
    """The table in Markdown; found (stated by the maps), and the promise."""
    titles = ["exposure"]
    titles += [f"{name}, {c.label}" for c in curves for name in names]
    titles += [f"{name}, promised" for name in names]
    lines = [f"| {' | '.join(titles)} |", "|---" * len(titles) + "|"]
    for i, exposure in enumerate(curves[0].exposure):
        cells = [f"{exposure:g}"]
        for c in curves:
            both = zip(c.found[i], c.stated[i], strict=True)
            cells += [f"{found:.3f} ({stated:.3f})" for found, stated in both]
        cells += [f"{value:.3f}" for value in promised[i]]
        lines.append(f"| {' | '.join(cells)} |")
    return "\n".join(lines) + "\n"


def floors(
    curve: Curve,
    longest: Calibration,
    single: NDArray[np.float64],
    names: Sequence[str],
) -> str:
    """Sentences on the fitted law of a curve, one a material."""
    by_kev = pattern_of_shifts(longest) / np.sqrt(LONGEST)
    lines = []
    for m, name in enumerate(names):
        floor, part = np.sqrt(curve.law()[:, m])
        lines.append(
            f"{name}, {curve.label}: floor {floor:.3f} of one error = "
            f"{1e3 * floor * single[m]:.2f} mg/cm2 = {1e3 * floor / by_kev[m]:.0f} "
            f"eV in every threshold; {part:.3f} falls with the square root"
        )
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    main()
