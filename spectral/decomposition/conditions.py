"""What exposures of one current, output and count time share for the solver."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.decomposition.responses import Responses, responses
from spectral.decomposition.start_values import StartRegression
from spectral.forward.node_response import pixel_weights
from spectral.forward.overlap_scatter import overlap_excess

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.forward.node_response import NodeTables

    Precision = type[np.float32 | np.float64]

CURRENT_STEP = 1e-3
"""Steps of ln(current) within which exposures share what depends on current alone."""
OUTPUT_STEP = 2e-4
"""Steps of ln(photon rate) within which exposures share their weights."""
EXCESS_STEP = 0.2
"""Steps of ln(current) within which the excess of the scatter hardly changes."""
TABLE_STEP = 0.05
"""Steps of ln(photon rate) within which they share their node tables."""
KEPT = 2
"""Sets of weights held at once: each is the largest array of a decomposition."""
KEPT_TABLES = 24
SINGLE_ERROR = 3e-3
"""Standard errors of a bin's open counts that the rounding of weights may cost."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Conditions:
    """Responses of some pixels in one exposure's beam.

    Attributes
    ----------
    tables : NodeTables
    output : float
        Tube output over that of the tables.
    responses : Responses
    start : StartRegression
    rate_limit : array, shape (pixel,)
        Counts above the lowest threshold at the highest calibrated rate.
    overlap_excess : float
        As the function of that name gives for the current.
    """

    tables: NodeTables
    output: float
    responses: Responses
    start: StartRegression
    rate_limit: NDArray[np.float64]
    overlap_excess: float


class ConditionsStore:
    """Conditions made when first asked for; only the last few sets are kept.

    Parameters
    ----------
    calibration : Calibration
    threads : int
    """

    def __init__(self, calibration: Calibration, *, threads: int = 1) -> None:
        self._calibration = calibration
        self._threads = threads
        self._nodes: OrderedDict[tuple[int, int], NodeTables] = OrderedDict()
        self._held: OrderedDict[tuple[float, ...], Conditions] = OrderedDict()
        self._excess: dict[int, float] = {}
        self._starts: dict[tuple[int, int, float], tuple[StartRegression, Precision]]
        self._starts = {}
        self._highest: dict[tuple[int, int], NDArray[np.float64]] = {}

    def tables(self, current_ma: float, output: float) -> tuple[NodeTables, float]:
        """Node tables that serve a current and output, and the output over theirs.

        They depend on nothing that was asked before, so neither blocks nor their order
        change a result.
        """
        current, step, coarse = _steps(current_ma, output)
        key = (current, coarse)
        if key not in self._nodes:
            while len(self._nodes) >= KEPT_TABLES:
                self._nodes.popitem(last=False)
            self._nodes[key] = self._calibration.nodes(
                float(np.exp(CURRENT_STEP * current)),
                float(np.exp(TABLE_STEP * coarse)),
            )
        fine = OUTPUT_STEP * step - TABLE_STEP * coarse
        return self._nodes[key], float(np.exp(fine))

    def at(
        self,
        current_ma: float,
        output: float,
        count_time_s: float,
        flat: NDArray[np.int64],
    ) -> Conditions:
        """Conditions of an exposure for pixels by flat index."""
        current, step, coarse = _steps(current_ma, output)
        ends = (int(flat[0]), int(flat[-1])) if flat.size else (-1, -1)
        key = (current, step, count_time_s, *ends)
        if key in self._held:
            self._held.move_to_end(key)
            return self._held[key]
        tables, fine = self.tables(current_ma, output)
        while len(self._held) >= KEPT:
            self._held.popitem(last=False)
        if ends not in self._highest:
            self._highest[ends] = self._highest_rate(flat)
        regression = (current, coarse, count_time_s)
        if regression not in self._starts:
            if len(self._starts) >= KEPT_TABLES:
                self._starts.clear()
            average = average_weight(self._calibration, tables, count_time_s)
            self._starts[regression] = (
                start_regression(self._calibration, tables, average),
                precision_for(average),
            )
        start, precision = self._starts[regression]
        made = Conditions(
            tables=tables,
            output=fine,
            responses=responses(
                self._calibration,
                tables,
                flat,
                count_time_s=count_time_s,
                output=fine,
                threads=self._threads,
                precision=precision,
            ),
            start=start,
            rate_limit=self._highest[ends] * count_time_s,
            overlap_excess=self.excess(current_ma),
        )
        self._held[key] = made
        return made

    def excess(self, current_ma: float) -> float:
        """What overlapping pulses add to variances (`overlap_excess`)."""
        coarse = round(np.log(current_ma) / EXCESS_STEP)
        if coarse not in self._excess:
            rate = self._calibration.photons_per_mas * np.exp(EXCESS_STEP * coarse)
            self._excess[coarse] = overlap_excess(
                self._calibration.model,
                self._calibration.levels_kev,
                self._calibration.largest,
                float(rate),
            )
        return self._excess[coarse]

    def _highest_rate(self, flat: NDArray[np.int64]) -> NDArray[np.float64]:
        """Counts per second above the lowest threshold at the highest current."""
        nothing = np.zeros((1, self._calibration.largest.size))
        current = np.array([self._calibration.largest_current_ma])
        found = self._calibration.expected_bins(nothing, current, np.ones(1), flat)
        return np.asarray(found[:, 0].sum(axis=1))


def _steps(current_ma: float, output: float) -> tuple[int, int, int]:
    """Steps of the current, then of the rate at that current, fine and coarse."""
    current = round(np.log(current_ma) / CURRENT_STEP)
    rest = np.log(current_ma) - CURRENT_STEP * current + np.log(output)
    step = round(rest / OUTPUT_STEP)
    return current, step, round(step * OUTPUT_STEP / TABLE_STEP)


def average_weight(
    calibration: Calibration, tables: NodeTables, count_time_s: float
) -> NDArray[np.float64]:
    """Weights of the average pixel, shape (bin, node), in counts."""
    weight, _ = pixel_weights(
        tables, calibration.levels_kev, calibration.average_pixel()
    )
    return np.asarray(count_time_s * weight[0])


def start_regression(
    calibration: Calibration, tables: NodeTables, average: NDArray[np.float64]
) -> StartRegression:
    """Start values from the average pixel, the same whatever pixels are solved."""
    return StartRegression.fit(average, tables.attenuation, _grid(calibration.largest))


def precision_for(average: NDArray[np.float64]) -> Precision:
    """Single precision, unless its rounding would show in the counts of a bin.

    Parameters
    ----------
    average : array, shape (bin, node), in counts
        Weights of alternating signs lose more than the digits of their sum.
    """
    counts = np.maximum(average.sum(axis=1), 1.0)
    rounding = 0.5 * np.finfo(np.float32).eps * np.abs(average).sum(axis=1)
    return (
        np.float32 if (rounding / np.sqrt(counts)).max() < SINGLE_ERROR else np.float64
    )


def _grid(largest: NDArray[np.float64]) -> NDArray[np.float64]:
    axis = np.linspace(-0.05, 1.1, 12 if largest.size < 3 else 7)
    mesh = np.meshgrid(*[axis * top for top in largest], indexing="ij")
    return np.stack([m.ravel() for m in mesh], axis=1)
