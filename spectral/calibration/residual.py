"""What the physics leaves of the mean counts, as a smooth function of the object."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

DEGREES = (1, 2, 3, 4)
SIZES = (3e-4, 1e-3, 3e-3, 1e-2, 3e-2, 0.1)
DRIFTS = (1e-5, 1e-4, 3e-4, 1e-3, 3e-3, 1e-2, 3e-2)
REACH = 1.2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ResidualCorrection:
    """Factor on each bin's expected counts, near 1.

    The logarithm of the factor is a polynomial in z_m = exp(-REACH a_m / largest_m):
    it stays bounded when the object leaves the domain of the steps. Away from the
    reference current two terms follow the transmitted rate.

    Attributes
    ----------
    largest : array, shape (material,), in g/cm2
    powers : array of int, shape (term, material)
        Exponents of (1 - z) in each term.
    coefficient : array, shape (term + 2, bin)
        The last two multiply the change of the transmitted rate and of its square.
    covariance : array, shape (bin, term + 2, term + 2)
        Marginal covariance of each bin's coefficients.
    reference_current_ma : float
    decay : array, shape (material,), in cm2/g
        Mean attenuation that stands for the transmitted rate.
    size : float
        Penalty's standard deviation of a coefficient: how large the correction is.
    drift_spread : float
        Spread of the tube's output between exposures that fits best.
    drift : array, shape (exposure,)
        Output of each exposure, minus 1, as found with the correction.
    degree : int
    """

    largest: NDArray[np.float64]
    powers: NDArray[np.int64]
    coefficient: NDArray[np.float64]
    covariance: NDArray[np.float64]
    reference_current_ma: float
    decay: NDArray[np.float64]
    size: float
    drift_spread: float
    drift: NDArray[np.float64]
    degree: int

    def terms(
        self,
        areal_density: NDArray[np.float64],
        current_ma: NDArray[np.float64] | float,
    ) -> NDArray[np.float64]:
        """Basis functions, shape (case, term + 2)."""
        return _terms(
            areal_density,
            np.broadcast_to(np.asarray(current_ma, float), areal_density.shape[:1]),
            self.largest,
            self.powers,
            self.decay,
            self.reference_current_ma,
        )

    def log_factor(
        self,
        areal_density: NDArray[np.float64],
        current_ma: NDArray[np.float64] | float,
    ) -> NDArray[np.float64]:
        """Logarithm of the factor, shape (case, bin)."""
        return np.asarray(self.terms(areal_density, current_ma) @ self.coefficient)


def _powers(materials: int, degree: int) -> NDArray[np.int64]:
    every = product(range(degree + 1), repeat=materials)
    return np.array(sorted((p for p in every if sum(p) <= degree), key=sum), np.int64)


def _terms(
    areal: NDArray[np.float64],
    current: NDArray[np.float64],
    largest: NDArray[np.float64],
    powers: NDArray[np.int64],
    decay: NDArray[np.float64],
    reference: float,
) -> NDArray[np.float64]:
    depth = -np.expm1(-REACH * areal / largest)
    polynomial = np.prod(depth[:, None, :] ** powers[None, :, :], axis=2)
    passed = np.exp(-areal @ decay)
    ratio = current / reference
    rate = np.stack([(ratio - 1.0) * passed, (ratio**2 - 1.0) * passed**2], axis=1)
    return np.concatenate([polynomial, rate], axis=1)


def fit_residual(
    log_ratio: NDArray[np.float64],
    error: NDArray[np.float64],
    areal_density: NDArray[np.float64],
    current_ma: NDArray[np.float64],
    decay: NDArray[np.float64],
) -> ResidualCorrection:
    """Smooth correction of mean bin counts, its size chosen by the evidence.

    Parameters
    ----------
    log_ratio : array, shape (exposure, bin)
        Logarithm of observed over expected mean counts.
    error : array, shape (exposure, bin)
        Statistical standard deviation of that.
    areal_density : array, shape (exposure, material), in g/cm2
    current_ma : array, shape (exposure,)
    decay : array, shape (material,), in cm2/g

    Returns
    -------
    ResidualCorrection

    Notes
    -----
    Normal priors: coefficients N(0, size^2), constants wide, one drift for each
    exposure N(0, drift_spread^2) common to its bins. Degree, size and drift_spread
    maximise the marginal likelihood. Source: D. J. C. MacKay, Neural Comput. 4
    (1992) 415 (evidence for linear models).
    """
    largest = areal_density.max(axis=0)
    values, occurrences = np.unique(current_ma, return_counts=True)
    reference = float(values[np.argmax(occurrences)])
    best: tuple[float, int, float, float] | None = None
    for degree in DEGREES:
        powers = _powers(areal_density.shape[1], degree)
        if powers.shape[0] > log_ratio.shape[0] - 2:
            continue
        terms = _terms(areal_density, current_ma, largest, powers, decay, reference)
        for size, spread in product(SIZES, DRIFTS):
            evidence = _evidence(log_ratio, error, terms, size, spread)
            if best is None or evidence > best[0]:
                best = (evidence, degree, size, spread)
    if best is None:
        best = (0.0, 1, SIZES[2], DRIFTS[2])
    _, degree, size, spread = best
    powers = _powers(areal_density.shape[1], degree)
    terms = _terms(areal_density, current_ma, largest, powers, decay, reference)
    coefficient, covariance, drift = _solve(log_ratio, error, terms, size, spread)
    return ResidualCorrection(
        largest=largest,
        powers=powers,
        coefficient=coefficient,
        covariance=covariance,
        reference_current_ma=reference,
        decay=decay,
        size=size,
        drift_spread=spread,
        drift=drift,
        degree=degree,
    )


def refit_residual(
    model: ResidualCorrection,
    log_ratio: NDArray[np.float64],
    error: NDArray[np.float64],
    areal_density: NDArray[np.float64],
    current_ma: NDArray[np.float64],
) -> ResidualCorrection:
    """The same form of correction, fitted to other exposures (as `fit_residual`)."""
    terms = model.terms(areal_density, current_ma)
    coefficient, covariance, drift = _solve(
        log_ratio, error, terms, model.size, model.drift_spread
    )
    return replace(model, coefficient=coefficient, covariance=covariance, drift=drift)


def _prior(terms: int, bins: int, size: float) -> NDArray[np.float64]:
    """Prior variance of the coefficients, bin after bin."""
    one = np.full(terms, size**2)
    one[0] = 0.1**2
    return np.tile(one, bins)


def _system(
    log_ratio: NDArray[np.float64],
    terms: NDArray[np.float64],
    size: float,
    spread: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Design matrix (datum, unknown), data and prior variances, drift last."""
    exposures, bins = log_ratio.shape
    design = np.concatenate(
        [
            np.kron(np.eye(bins), terms),
            np.kron(np.ones((bins, 1)), np.eye(exposures)),
        ],
        axis=1,
    )
    variance = np.concatenate(
        [_prior(terms.shape[1], bins, size), np.full(exposures, spread**2)]
    )
    return design, log_ratio.T.ravel(), variance


def _evidence(
    log_ratio: NDArray[np.float64],
    error: NDArray[np.float64],
    terms: NDArray[np.float64],
    size: float,
    spread: float,
) -> float:
    design, data, variance = _system(log_ratio, terms, size, spread)
    noise = error.T.ravel() ** 2
    total = (design * variance) @ design.T + np.diag(noise)
    sign, logdet = np.linalg.slogdet(total)
    if sign <= 0:
        return -np.inf
    return float(-0.5 * (logdet + data @ np.linalg.solve(total, data)))


def _solve(
    log_ratio: NDArray[np.float64],
    error: NDArray[np.float64],
    terms: NDArray[np.float64],
    size: float,
    spread: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    design, data, variance = _system(log_ratio, terms, size, spread)
    weight = 1.0 / error.T.ravel() ** 2
    information = (design.T * weight) @ design + np.diag(1.0 / variance)
    covariance = np.linalg.inv(information)
    found = covariance @ (design.T @ (weight * data))
    bins, count = log_ratio.shape[1], terms.shape[1]
    coefficient = found[: bins * count].reshape(bins, count).T
    blocks = np.stack(
        [
            covariance[b * count : (b + 1) * count, b * count : (b + 1) * count]
            for b in range(bins)
        ]
    )
    return coefficient, blocks, found[bins * count :]
