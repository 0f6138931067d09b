"""Where the fit of the average pixel starts: flux and times of the pulse."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.calibration.nuisance import population_nuisances
from spectral.calibration.population import _first_values
from spectral.errors import CalibrationError

CURRENT = np.array([0.8, 2.0, 4.0, 4.0])
PASSED = np.array([1.0, 1.0, 1.0, 0.2])


class Counter:
    """Stands for the problem of the fit: a paralysable counter, two thresholds."""

    nuisances = population_nuisances(2)

    def heights(self, values: np.ndarray) -> np.ndarray:
        return values

    def predict(
        self, values: np.ndarray, drift: np.ndarray, heights: np.ndarray
    ) -> np.ndarray:
        assert heights.shape == values.shape
        named = dict(zip([n.name for n in self.nuisances], values, strict=True))
        rate = np.exp(named["ln_flux"]) * CURRENT * PASSED * (1.0 + drift)
        time = np.exp(named["ln_dead_time"]) + 2.4 * np.exp(named["ln_tail"])
        above = rate * np.exp(-rate * time * 1e-9)
        return np.asarray(above[:, None] * np.array([1.0, 0.3]))


@pytest.mark.parametrize("factor", [0.2, 0.7, 1.5])
def test_opens_at_several_currents_tell_the_times(factor: float) -> None:
    problem = Counter()
    start = np.array([n.start for n in problem.nuisances])
    true = start.copy()
    true[0] = 12.5
    names = [n.name for n in problem.nuisances]
    times = [names.index("ln_dead_time"), names.index("ln_tail")]
    true[times] += np.log(factor)
    # the upper threshold lies elsewhere than thought: only ratios must count
    observed = problem.predict(true, np.zeros(4), true) * np.array([1.0, 0.6])
    found = _first_values(problem, start, observed)  # type: ignore[arg-type]
    np.testing.assert_allclose(found[1:], true[1:])
    assert found[0] == pytest.approx(12.5, abs=0.05)


def test_a_scan_without_counts_is_refused() -> None:
    problem = Counter()
    start = np.array([n.start for n in problem.nuisances])
    with pytest.raises(CalibrationError, match="hold no counts above the lowest"):
        _first_values(problem, start, np.zeros((4, 2)))  # type: ignore[arg-type]
