"""The average pixel: fitting tube and sensor unknowns to the scan's mean counts."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.nuisance import as_mapping, population_nuisances
from spectral.errors import CalibrationError
from spectral.forward.counting_model import CountingModel, counts_to_bins, cubic_weights

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.calibration.nuisance import Nuisance
    from spectral.calibration.wedge_data import WedgeData
    from spectral.forward.setup import Setup

MODEL_ERROR = 7e-4
"""Relative error of the mean model that the fit allows for in each bin."""
ENOUGH_GAIN = 0.05
"""Relative fall of the penalised chi-square below which the fit is at rest."""
THREADS = 2
LARGEST_LOG_STEP = 1.0
LARGEST_STEP = 1.5
"""Most that an unknown may move in one round, in spreads of its prior."""
FIRST_TIMES = (0.1, 0.2, 0.4, 0.7, 1.0, 1.5, 3.0)
"""Factors on the pulse's times among which the first fit starts."""
DRIFT_SPREAD = 1e-3
"""Prior spread of the tube's output from exposure to exposure."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Population:
    """What the average pixel taught.

    Attributes
    ----------
    model : CountingModel
    values : dict of str to float
        Unknowns by name (`spectral.calibration.nuisance`).
    errors : dict of str to float
        Their standard deviations.
    photons_per_mas : float
        Photons of the open beam upon one pixel per mA s.
    shift_kev : array, shape (threshold,), in keV
        Mean true threshold minus its nominal setting.
    drift : array, shape (exposure,)
        Relative output of the tube in each exposure, minus 1.
    residual : array, shape (exposure, bin)
        Mean counts over model, minus 1.
    residual_error : array, shape (exposure, bin)
        Statistical standard deviation of that.
    """

    model: CountingModel
    values: dict[str, float]
    errors: dict[str, float]
    photons_per_mas: float
    shift_kev: NDArray[np.float64]
    drift: NDArray[np.float64]
    residual: NDArray[np.float64]
    residual_error: NDArray[np.float64]


@dataclass(slots=True, kw_only=True, eq=False)
class _Problem:
    """Mean bin counts of a scan, and their prediction."""

    setup: Setup
    nuisances: tuple[Nuisance, ...]
    areal: NDArray[np.float64]
    current: NDArray[np.float64]
    time: NDArray[np.float64]
    nominal: NDArray[np.float64]
    spread_kev: NDArray[np.float64]
    samples: int

    def predict(
        self,
        values: NDArray[np.float64],
        drift: NDArray[np.float64],
        heights: NDArray[np.float64],
    ) -> NDArray[np.float64]:
        """Mean counts above each threshold, shape (exposure, threshold)."""
        named = as_mapping(self.nuisances, values)
        model = self.setup.model(named, heights=heights)
        rate = np.exp(named["ln_flux"]) * self.current * (1.0 + drift)
        curves = model.counting_curves(self.areal, rate)
        levels = self.nominal + _shifts(named, self.nominal.size)
        return self.time[:, None] * mean_over_spread(
            curves, levels, self.spread_kev, model.step_kev
        )

    def heights(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        return self.setup.heights(
            as_mapping(self.nuisances, values), samples=self.samples
        )


def _shifts(named: dict[str, float], count: int) -> NDArray[np.float64]:
    return np.array([named[f"shift_{k + 1}_kev"] for k in range(count)])


def mean_over_spread(
    curves: NDArray[np.float64],
    levels_kev: NDArray[np.float64],
    spread_kev: NDArray[np.float64],
    step_kev: float,
) -> NDArray[np.float64]:
    """Curves read at normally scattered thresholds and averaged.

    Parameters
    ----------
    curves : array, shape (exposure, grid)
    levels_kev, spread_kev : arrays, shape (threshold,), in keV
    step_kev : float

    Returns
    -------
    array, shape (exposure, threshold)

    Notes
    -----
    Five-point Gauss-Hermite quadrature. Source: M. Abramowitz, I. Stegun, Handbook
    of Mathematical Functions, 25.4.46.
    """
    node, share = np.polynomial.hermite_e.hermegauss(5)
    share = share / share.sum()
    levels = levels_kev[:, None] + spread_kev[:, None] * node
    first, value, _ = cubic_weights(levels, step_kev, curves.shape[1])
    read = np.zeros((curves.shape[0], *levels.shape))
    for q in range(4):
        read += curves[:, first + q] * value[..., q]
    return np.asarray(read @ share)


def fit_population(
    data: WedgeData,
    setup: Setup,
    *,
    spread_kev: NDArray[np.float64],
    start: dict[str, float] | None = None,
    rounds: int = 6,
    samples: int = 1024,
    progress: Callable[[float], None] | None = None,
) -> Population:
    """Fit the unknowns to the mean counts of the good pixels.

    Parameters
    ----------
    data : WedgeData
    setup : Setup
    spread_kev : array, shape (threshold,), in keV
        Standard deviation of the thresholds between pixels.
    start : dict, optional
        Values to start from; the prior means otherwise.
    rounds : int
        At most so many damped Gauss-Newton rounds.
    samples : int
        Interactions per energy for the pulse heights.
    progress : callable, optional
        Called with the finished share.

    Raises
    ------
    CalibrationError
        If the fit does not come near the data.

    Notes
    -----
    Least squares with normal priors on unknowns and on each exposure's drift;
    variance of a mean bin = Poisson / pixels + (MODEL_ERROR x counts)^2. Source: D.
    W. Marquardt, J. SIAM 11 (1963) 431 (damped Gauss-Newton steps).
    """
    nuisances = population_nuisances(data.thresholds_kev.size)
    problem = _Problem(
        setup=setup,
        nuisances=nuisances,
        areal=data.areal_density,
        current=data.current_ma,
        time=data.count_time_s,
        nominal=data.thresholds_kev,
        spread_kev=spread_kev,
        samples=samples,
    )
    observed = data.above.mean(axis=0)
    prior = np.array([n.start for n in nuisances])
    values = prior.copy()
    for i, nuisance in enumerate(nuisances):
        if start is not None and nuisance.name in start:
            values[i] = start[nuisance.name]
    drift = np.zeros(observed.shape[0])
    if start is None:
        values = _first_values(problem, values, observed)
        prior[0] = values[0]
    fit = _Fit(problem, prior, observed, data.above.shape[0])
    point = fit.at(values, drift)
    information = np.eye(1)
    damping = 0.0
    for turn in range(rounds):
        score, information = fit.slope(point)
        moved, damping = fit.advanced(point, score, information, damping)
        gained = point.loss - moved.loss
        point = moved
        if progress is not None:
            progress((turn + 1) / rounds)
        if gained < ENOUGH_GAIN * point.loss:
            break
    covariance = np.asarray(np.linalg.inv(information))
    return _result(problem, point, covariance, data)


@dataclass(frozen=True, slots=True, eq=False)
class _Point:
    """Values of the unknowns, with what they predict."""

    values: NDArray[np.float64]
    drift: NDArray[np.float64]
    heights: NDArray[np.float64]
    expected: NDArray[np.float64]
    loss: float


@dataclass(frozen=True, slots=True, eq=False)
class _Fit:
    """Penalised least squares on mean bins, with a way downhill."""

    problem: _Problem
    prior: NDArray[np.float64]
    observed: NDArray[np.float64]
    pixels: int

    @property
    def spread(self) -> NDArray[np.float64]:
        """Prior standard deviations of unknowns and drifts."""
        unknowns = [n.spread for n in self.problem.nuisances]
        return np.concatenate([unknowns, np.full(self.observed.shape[0], DRIFT_SPREAD)])

    @property
    def limits(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Lowest and highest values that a step may reach: prior +- 5 spreads."""
        spread = self.spread[: self.prior.size]
        return self.prior - 5.0 * spread, self.prior + 5.0 * spread

    def weight(self, expected: NDArray[np.float64]) -> NDArray[np.float64]:
        """Inverse variance of each mean bin."""
        floor = np.maximum(expected, 1e-3)
        return np.asarray(1.0 / (floor / self.pixels + (MODEL_ERROR * floor) ** 2))

    def at(self, values: NDArray[np.float64], drift: NDArray[np.float64]) -> _Point:
        heights = self.problem.heights(values)
        expected = counts_to_bins(self.problem.predict(values, drift, heights))
        seen = counts_to_bins(self.observed)
        # observed counts set the weights: an expected zero must not win
        loss = (self.weight(seen) * (seen - expected) ** 2).sum()
        away = np.concatenate([values - self.prior, drift]) / self.spread
        return _Point(values, drift, heights, expected, float(loss + away @ away))

    def slope(self, point: _Point) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Score and information of unknowns and drifts."""
        problem, values, drift = self.problem, point.values, point.drift
        at = problem.predict(values, drift, point.heights)

        def column(i: int) -> NDArray[np.float64]:
            nuisance = problem.nuisances[i]
            moved = values.copy()
            moved[i] += nuisance.step
            other = point.heights
            if nuisance.changes_heights:
                other = problem.heights(moved)
            change = problem.predict(moved, drift, other) - at
            return counts_to_bins(change / nuisance.step).ravel()

        with ThreadPoolExecutor(THREADS) as pool:
            columns = list(pool.map(column, range(values.size)))
        for e in range(at.shape[0]):
            one = np.zeros_like(point.expected)
            one[e] = point.expected[e]
            columns.append(one.ravel())
        jacobian = np.stack(columns, axis=1)
        weight = self.weight(counts_to_bins(self.observed)).ravel()
        information = (jacobian.T * weight) @ jacobian + np.diag(self.spread**-2)
        left = (counts_to_bins(self.observed) - point.expected).ravel()
        score = jacobian.T @ (weight * left)
        score -= np.concatenate([values - self.prior, drift]) / self.spread**2
        return score, information

    def advanced(
        self,
        point: _Point,
        score: NDArray[np.float64],
        information: NDArray[np.float64],
        damping: float,
    ) -> tuple[_Point, float]:
        """The point after a damped step that gains, and the next damping."""
        size = point.values.size
        for _ in range(8):
            damped = information + damping * np.diag(np.diag(information))
            move = np.linalg.solve(damped, score)
            step = move[:size]
            for i, nuisance in enumerate(self.problem.nuisances):
                most = LARGEST_STEP * nuisance.spread
                if nuisance.name.startswith("ln_"):
                    most = min(most, LARGEST_LOG_STEP)
                step[i] = np.clip(step[i], -most, most)
            values = np.clip(point.values + step, *self.limits)
            tried = self.at(values, point.drift + move[size:])
            if np.isfinite(tried.loss) and tried.loss < point.loss:
                return tried, damping / 10.0
            damping = max(10.0 * damping, 1e-4)
        return point, damping


def _first_values(
    problem: _Problem, values: NDArray[np.float64], observed: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Flux and times of the pulse that meet the counts best, all else as it is.

    Counts are compared threshold by threshold, each at its own level: how far they
    are from proportional to the current tells the time, whatever the spectrum.
    """
    if not np.median(observed[:, 0]) > 0.0:
        msg = "the open and wedge exposures hold no counts above the lowest threshold"
        raise CalibrationError(msg)
    names = [n.name for n in problem.nuisances]
    times = [names.index("ln_dead_time"), names.index("ln_tail")]
    heights = problem.heights(values)
    still = np.zeros(observed.shape[0])

    def log_ratio(trial: NDArray[np.float64]) -> NDArray[np.float64]:
        counted = problem.predict(trial, still, heights)
        floor = np.maximum(counted, 1e-300)
        return np.asarray(np.log(np.maximum(observed, 1e-3) / floor))

    best = values
    least = np.inf
    for change in FIRST_TIMES:
        trial = values.copy()
        trial[times] += np.log(change)
        trial[0] = 0.0
        for _ in range(2):
            trial[0] += np.median(log_ratio(trial)[:, 0])
        ratio = log_ratio(trial)
        away = float(np.square(ratio - np.median(ratio, axis=0)).mean())
        if away < least:
            best, least = trial, away
    return best


def _result(
    problem: _Problem,
    point: _Point,
    covariance: NDArray[np.float64],
    data: WedgeData,
) -> Population:
    """Collect a fit, and refuse one that does not come near the data."""
    named = as_mapping(problem.nuisances, point.values)
    expected = point.expected
    observed = counts_to_bins(data.above.mean(axis=0))
    residual = observed / expected - 1.0
    error = 1.0 / np.sqrt(np.maximum(expected, 1e-3) * data.above.shape[0])
    if not np.all(np.isfinite(residual)) or np.median(np.abs(residual)) > 0.2:
        msg = (
            "the forward model does not come near the scan's mean counts (median "
            f"departure {100 * np.median(np.abs(residual)):.0f} %); check voltage, "
            "filters, sensor, threshold energies and step thicknesses in the file"
        )
        raise CalibrationError(msg)
    deviation = np.sqrt(np.diag(covariance))
    return Population(
        model=problem.setup.model(named, heights=point.heights),
        values=named,
        errors={
            n.name: float(d) for n, d in zip(problem.nuisances, deviation, strict=False)
        },
        photons_per_mas=float(np.exp(named["ln_flux"])),
        shift_kev=_shifts(named, problem.nominal.size),
        drift=point.drift,
        residual=residual,
        residual_error=error,
    )
