"""Figures that a report draws out of a calibration."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.nuisance import population_nuisances
from spectral.reporting.maps_summary import median
from spectral.reporting.wording import GRAMS, number, with_error

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

_UNKNOWN_WORDS: dict[str, tuple[str, str]] = {
    "ln_flux": ("photons of the open beam upon a pixel per mA s", ""),
    "ln_voltage": ("tube voltage over its nominal value", ""),
    "ln_anode_angle": ("anode angle", "degrees"),
    "extra_filter_mm_al": ("filtration besides the named filters", "mm Al"),
    "ln_noise": ("electronic noise, standard deviation", "keV"),
    "ln_dead_time": ("time that a pulse is held at its peak", "ns"),
    "ln_tail": ("time constant of a pulse's rise and fall", "ns"),
    "ln_order": ("order of the pulse shaper", ""),
    "ln_initial_cloud": ("charge cloud where it starts, standard deviation", "um"),
    "ln_diffusion": ("variance that the cloud gains per um of drift", "um"),
    "trapping": ("share of the charge lost over the whole sensor", ""),
    "ln_fluorescence": ("fluorescence over its tabulated yield", ""),
    "ln_thickness": ("sensor thickness over its nominal value", ""),
}
_LOGARITHM = "ln_"
_VAGUE = 4.0
_WIDE = 0.4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Unknown:
    """One unknown of tube and sensor, as fitted and as expected beforehand.

    Attributes
    ----------
    words, unit : str
    value, error : float
        In the unit; the error by first order for those fitted as logarithms.
    prior, prior_spread : float
        In the unit.
    pull : float
        Fitted minus prior, in prior spreads; NaN where there is no prior.
    pull_error : float
        Error in prior spreads: 1 means that the scan taught nothing.
    vague : bool
        The prior says next to nothing: a factor beyond e to the fourth.
    relative : bool
        Its logarithm was fitted, with a normal prior.
    """

    words: str
    unit: str
    value: float
    error: float
    prior: float
    prior_spread: float
    pull: float
    pull_error: float
    vague: bool
    relative: bool

    @property
    def expected(self) -> str:
        """What was expected beforehand, in words."""
        if self.vague or not np.isfinite(self.prior):
            return "anything"
        if self.relative and self.prior_spread > _WIDE * self.prior:
            factor = float(np.exp(self.prior_spread / self.prior))
            return f"{number(self.prior)}, within a factor {number(factor, 2)}"
        return with_error(self.prior, self.prior_spread)


def unknowns(calibration: Calibration) -> tuple[Unknown, ...]:
    """All unknowns of the population fit, in its order."""
    count = calibration.thresholds_kev.size
    priors = {n.name: n for n in population_nuisances(count)}
    found = []
    for name, fitted in calibration.unknowns.items():
        error = calibration.unknown_errors.get(name, float("nan"))
        prior = priors.get(name)
        start = prior.start if prior else float("nan")
        spread = prior.spread if prior else float("nan")
        words, unit = _words(name, calibration.thresholds_kev)
        logarithm = name.startswith(_LOGARITHM)
        value = float(np.exp(fitted)) if logarithm else fitted
        expected = float(np.exp(start)) if logarithm else start
        found.append(
            Unknown(
                words=words,
                unit=unit,
                value=value,
                error=error * value if logarithm else error,
                prior=expected,
                prior_spread=spread * expected if logarithm else spread,
                pull=(fitted - start) / spread,
                pull_error=error / spread,
                vague=logarithm and spread > _VAGUE,
                relative=logarithm,
            )
        )
    return tuple(found)


def _words(name: str, thresholds_kev: NDArray[np.float64]) -> tuple[str, str]:
    if name in _UNKNOWN_WORDS:
        return _UNKNOWN_WORDS[name]
    parts = name.split("_")
    if parts[0] == "shift" and parts[1].isdigit():
        nominal = thresholds_kev[int(parts[1]) - 1]
        return f"threshold {parts[1]} minus its nominal {number(nominal)} keV", "keV"
    return name.replace("_", " "), ""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Thresholds:
    """Where the thresholds truly lie; good pixels only.

    Attributes
    ----------
    nominal : array, shape (threshold,), in keV
    offset : array, shape (threshold, row, column), in keV
        True minus nominal; NaN where bad.
    departure : array, shape (threshold, row, column), in keV
        True minus the average pixel's.
    mean, mean_error : arrays, shape (threshold,), in keV
        Of the offset; the error is that of the population fit.
    spread : array, shape (threshold,), in keV
        Standard deviation between pixels, of the fitted values.
    pixel_error : array, shape (threshold,), in keV
        Median error of a single pixel's threshold.
    """

    nominal: NDArray[np.float64]
    offset: NDArray[np.float64]
    departure: NDArray[np.float64]
    mean: NDArray[np.float64]
    mean_error: NDArray[np.float64]
    spread: NDArray[np.float64]
    pixel_error: NDArray[np.float64]


def thresholds(calibration: Calibration) -> Thresholds:
    """True thresholds of a calibration."""
    good = calibration.good
    nominal = calibration.thresholds_kev
    true = np.where(good, calibration.threshold_kev(), np.nan)
    offset = true - nominal[:, None, None]
    every = offset[:, good]
    variance = calibration.departure_covariance[good]
    places = range(1, 1 + nominal.size)
    return Thresholds(
        nominal=nominal,
        offset=offset,
        departure=true - calibration.levels_kev[:, None, None],
        mean=every.mean(axis=1),
        mean_error=np.array(
            [
                calibration.unknown_errors.get(f"shift_{k + 1}_kev", np.nan)
                for k in range(nominal.size)
            ]
        ),
        spread=every.std(axis=1, ddof=1) if good.sum() > 1 else np.zeros(nominal.size),
        pixel_error=np.array(
            [median(np.sqrt(np.maximum(variance[:, p, p], 0.0))) for p in places]
        ),
    )


def of_pixels(calibration: Calibration) -> dict[str, NDArray[np.float64]]:
    """Other maps of a calibration, NaN where bad, by name.

    Returns
    -------
    dict of arrays, shape (row, column)
        ``area`` in per cent from the average pixel, ``noise`` in keV, ``dead_time``
        in ns, ``deviance`` per degree of freedom.
    """
    good = calibration.good
    model = calibration.model
    variance = model.noise_kev**2 + calibration.departures[..., -2]
    values = {
        "area": 100.0 * np.expm1(calibration.departures[..., 0]),
        "noise": np.sqrt(np.maximum(variance, 0.0)),
        "dead_time": calibration.dead_time_ns * np.exp(calibration.departures[..., -1]),
        "deviance": calibration.deviance.astype(np.float64),
    }
    return {name: np.where(good, value, np.nan) for name, value in values.items()}


def step_names(calibration: Calibration) -> list[str]:
    """What stood in the beam in each open or wedge exposure, in words."""
    steps = calibration.steps
    several = np.unique(steps.current_ma).size > 1
    names = []
    for areal, current in zip(steps.areal_density, steps.current_ma, strict=True):
        parts = [
            f"{m.name} {number(float(a))}"
            for m, a in zip(calibration.materials, areal, strict=True)
            if a > 0.0
        ]
        name = " + ".join(parts) if parts else "open"
        names.append(f"{name}, {current:g} mA" if several else name)
    return names


@dataclass(frozen=True, slots=True)
class ResidualSize:
    """Root mean square of the residuals of steps and bins."""

    share: float
    sigmas: float


def residual_size(calibration: Calibration, *, corrected: bool) -> ResidualSize:
    """How well the mean counts are met, with or without the smooth correction."""
    steps = calibration.steps
    residual = steps.residual if corrected else steps.physics_residual
    return ResidualSize(
        share=float(np.sqrt(np.mean(residual**2))),
        sigmas=float(np.sqrt(np.mean((residual / steps.error) ** 2))),
    )


def domain_words(calibration: Calibration) -> str:
    """The calibrated domain, in words."""
    parts = [
        f"{m.name} up to {number(float(a))} {GRAMS}"
        for m, a in zip(calibration.materials, calibration.largest, strict=True)
    ]
    return ", ".join(parts)


def response_curves(
    calibration: Calibration, energies_kev: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Mean counts above each level per photon, at a vanishing rate.

    Parameters
    ----------
    calibration : Calibration
    energies_kev : array, shape (energy,)
        The model's nearest energies are taken.

    Returns
    -------
    energy_kev : array, shape (energy,)
        Those that were taken.
    level_kev : array, shape (grid,)
    above : array, shape (energy, grid)

    Notes
    -----
    Sum of the pulse heights from the top, smoothed by the electronic noise.
    """
    model = calibration.model
    nearest = np.abs(model.energy_kev[None] - energies_kev[:, None]).argmin(axis=1)
    nearest = np.unique(nearest)
    level = np.asarray(model.step_kev * np.arange(model.heights.shape[1]), np.float64)
    energy = np.asarray(model.energy_kev[nearest])
    return energy, level, _above(calibration, nearest)


def _above(calibration: Calibration, which: NDArray[np.int64]) -> NDArray[np.float64]:
    """Counts above each grid level, shape (energy, grid)."""
    model = calibration.model
    reach = int(np.ceil(4.0 * model.noise_kev / model.step_kev))
    place = model.step_kev * np.arange(-reach, reach + 1)
    kernel = np.exp(-0.5 * (place / max(model.noise_kev, 1e-6)) ** 2)
    kernel /= kernel.sum()
    heights = model.heights[which]
    wide = np.pad(heights, ((0, 0), (reach, reach)))
    smooth = np.array([np.convolve(row, kernel, mode="same") for row in wide])
    above = np.cumsum(smooth[:, ::-1], axis=1)[:, ::-1] - 0.5 * smooth
    return np.asarray(above[:, reach : reach + heights.shape[1]])


def bin_responses(calibration: Calibration) -> NDArray[np.float64]:
    """Mean counts in each bin per photon of each energy, shape (bin, energy)."""
    model = calibration.model
    every = np.arange(model.energy_kev.size)
    above = _above(calibration, every)
    level = model.step_kev * np.arange(above.shape[1])
    at = np.array(
        [[np.interp(t, level, a) for a in above] for t in calibration.levels_kev]
    )
    return np.asarray(at - np.concatenate([at[1:], np.zeros_like(at[:1])]))
