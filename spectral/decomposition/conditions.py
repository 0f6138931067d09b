"""What exposures of one current, output and count time share for the solver."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.decomposition.responses import Responses, responses
from spectral.decomposition.start_values import StartRegression
from spectral.forward.node_response import pixel_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.forward.node_response import NodeTables

OUTPUT_STEP = 2e-4
"""Steps of ln(output) within which exposures share their weights."""
TABLE_STEP = 0.05
"""Steps of ln(output) within which they share their node tables."""
KEPT = 2
"""Sets of weights held at once: each is the largest array of a decomposition."""


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
    """

    tables: NodeTables
    output: float
    responses: Responses
    start: StartRegression
    rate_limit: NDArray[np.float64]


class ConditionsStore:
    """Conditions made when first asked for; only the last few sets are kept.

    Parameters
    ----------
    calibration : Calibration
    """

    def __init__(self, calibration: Calibration) -> None:
        self._calibration = calibration
        self._nodes: dict[tuple[float, float], NodeTables] = {}
        self._held: OrderedDict[tuple[float, int, float, int, int], Conditions] = (
            OrderedDict()
        )

    def tables(self, current_ma: float, output: float) -> tuple[NodeTables, float]:
        """Node tables that serve a current and output, and the output over theirs."""
        step = OUTPUT_STEP * round(np.log(output) / OUTPUT_STEP)
        coarse = TABLE_STEP * round(step / TABLE_STEP)
        key = (current_ma, float(coarse))
        if key not in self._nodes:
            self._nodes[key] = self._calibration.nodes(
                current_ma, float(np.exp(coarse))
            )
        return self._nodes[key], float(np.exp(step - coarse))

    def at(
        self,
        current_ma: float,
        output: float,
        count_time_s: float,
        flat: NDArray[np.int64],
    ) -> Conditions:
        """Conditions of an exposure for pixels by flat index."""
        step = round(np.log(output) / OUTPUT_STEP)
        ends = (int(flat[0]), int(flat[-1])) if flat.size else (-1, -1)
        key = (current_ma, step, count_time_s, *ends)
        if key in self._held:
            self._held.move_to_end(key)
            return self._held[key]
        tables, fine = self.tables(current_ma, output)
        while len(self._held) >= KEPT:
            self._held.popitem(last=False)
        ready = responses(
            self._calibration, tables, flat, count_time_s=count_time_s, output=fine
        )
        made = Conditions(
            tables=tables,
            output=fine,
            responses=ready,
            start=start_regression(self._calibration, tables, count_time_s),
            rate_limit=self._rate_limit(count_time_s, flat),
        )
        self._held[key] = made
        return made

    def _rate_limit(
        self, count_time_s: float, flat: NDArray[np.int64]
    ) -> NDArray[np.float64]:
        nothing = np.zeros((1, self._calibration.largest.size))
        current = np.array([self._calibration.largest_current_ma])
        rate = self._calibration.expected_bins(nothing, current, np.ones(1), flat)
        return np.asarray(rate[:, 0].sum(axis=1) * count_time_s)


def start_regression(
    calibration: Calibration, tables: NodeTables, count_time_s: float
) -> StartRegression:
    """Start values from the average pixel, the same whatever pixels are solved."""
    weight, _ = pixel_weights(
        tables, calibration.levels_kev, calibration.average_pixel()
    )
    return StartRegression.fit(
        count_time_s * weight[0], tables.attenuation, _grid(calibration.largest)
    )


def _grid(largest: NDArray[np.float64]) -> NDArray[np.float64]:
    axis = np.linspace(-0.05, 1.1, 12 if largest.size < 3 else 7)
    mesh = np.meshgrid(*[axis * top for top in largest], indexing="ij")
    return np.stack([m.ravel() for m in mesh], axis=1)
