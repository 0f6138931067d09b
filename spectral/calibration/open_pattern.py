"""How much of a calibration's pattern over the pixels a scan's opens show."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import counts_to_bins

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.scan import Scan

MOST_PIXELS = 20_000
MOST_OPENS = 8
FEWEST_PIXELS = 30
FEWEST_COUNTS = 5.0
"""Mean counts of a pixel in a bin that takes part."""
LEAST_SHARE = 0.5
"""Of its pattern that a calibration's own detector shows. Drifts of single pixels do
not lower it, so that less speaks of other pixels (common practice, no source)."""
LEAST_PATTERN = 1e-6
"""Variance of the expected pattern, over that of the seen one, that is none."""
SURELY = 4.0
FAR = 5.0
_NORMAL = 1.4826
"""Standard deviation over median absolute deviation of a normal distribution."""


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenPattern:
    """The share of a calibration's open pattern that a scan shows.

    Attributes
    ----------
    share : float
        Near 1 for the calibration's own detector, near 0 for another one.
    error : float
        Its standard deviation.
    """

    share: float
    error: float

    @property
    def is_other(self) -> bool:
        """Whether the pattern is surely not the calibration's."""
        return self.share + SURELY * self.error < LEAST_SHARE

    @property
    def note(self) -> str:
        """One sentence if the pattern is not the calibration's, "" otherwise."""
        if not self.is_other:
            return ""
        return (
            "the open exposures' pattern over the pixels is not this calibration's "
            f"({self.share:.2f} +- {self.error:.2f} of it is seen, 1 is expected): is "
            "it of the same detector, and are the images stored the same way round?"
        )


def open_pattern(
    calibration: Calibration, scan: Scan, usable: NDArray[np.bool_]
) -> OpenPattern | None:
    """Compare a scan's open exposures with a calibration that did not see them.

    Parameters
    ----------
    calibration : Calibration
        Before its pixels follow the scan.
    scan : Scan
        Where it gives no tube current, the calibration's most used one is taken.
    usable : array of bool, shape (row, column)

    Returns
    -------
    OpenPattern or None
        None without opens, or where pixels and counts are too few.

    Notes
    -----
    Relative departures of the pixels' counts in each bin from their mean, and from a
    slope and curvature over the rows and columns, which the beam may have, are
    regressed on the same of the expected counts. Departures in a calibration are
    posterior means, on which the truth has a regression coefficient of 1 however
    little the wedge scan told (W. James, C. Stein, Proc. 4th Berkeley Symp. 1 (1961)
    361, in the form of empirical Bayes; from memory).
    """
    flat = np.flatnonzero(usable.ravel())
    flat = flat[:: max(1, -(-flat.size // MOST_PIXELS))]
    opens, current = _alike(calibration, scan)
    if opens.size == 0 or flat.size < FEWEST_PIXELS:
        return None
    above = np.zeros((scan.shape[1], flat.size))
    for exposure in opens:
        above += scan.counts.read([int(exposure)])[0].reshape(len(above), -1)[:, flat]
    seen = counts_to_bins(above, axis=0).T
    enough = seen.mean(axis=0) >= FEWEST_COUNTS
    if not enough.any():
        return None
    nothing = np.zeros((1, len(calibration.materials)))
    expected = calibration.expected_bins(nothing, current, np.ones(1), flat)[:, 0]
    smooth = _smooth(flat, usable.shape)
    return _share(
        _departure(seen[:, enough], smooth), _departure(expected[:, enough], smooth)
    )


def _alike(
    calibration: Calibration, scan: Scan
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Some open exposures of the commonest current, and that current, shape (1,)."""
    opens = scan.exposures("open")
    if scan.current_ma is None or opens.size == 0:
        usual = np.array([calibration.residual.reference_current_ma])
    else:
        values, times = np.unique(scan.current_ma[opens], return_counts=True)
        usual = values[[int(times.argmax())]]
        opens = opens[scan.current_ma[opens] == usual[0]]
    return opens[:MOST_OPENS], usual


def _smooth(flat: NDArray[np.int64], shape: tuple[int, ...]) -> NDArray[np.float64]:
    """Orthonormal columns of what a beam may add, shape (pixel, 6)."""
    row, column = (
        i / max(n - 1, 1) - 0.5
        for i, n in zip(np.unravel_index(flat, shape), shape, strict=True)
    )
    terms = [np.ones(flat.size), row, column, row**2, row * column, column**2]
    return np.linalg.qr(np.stack(terms, axis=1))[0]


def _departure(
    counts: NDArray[np.float64], smooth: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Relative departures from the mean, smooth parts taken off, (pixel, bin)."""
    relative = counts / counts.mean(axis=0) - 1.0
    return np.asarray(relative - smooth @ (smooth.T @ relative))


def _share(
    seen: NDArray[np.float64], expected: NDArray[np.float64]
) -> OpenPattern | None:
    """Regression of what is seen on what is expected, all bins together."""
    width = _NORMAL * np.median(np.abs(seen), axis=0)
    far = FAR * np.maximum(width, 1e-12)
    near = (np.abs(seen) < far).all(axis=1)
    if near.sum() < FEWEST_PIXELS:
        return None
    seen, expected = seen[near], expected[near]
    weight = 1.0 / np.maximum(width, 1e-6) ** 2
    size = float(((expected**2) @ weight).sum())
    if size < LEAST_PATTERN * near.sum():
        return None
    share = float(((seen * expected) @ weight).sum()) / size
    score = (expected * (seen - share * expected)) @ weight
    return OpenPattern(share=share, error=float(np.sqrt((score**2).sum())) / size)
