"""Statistics of counts: likelihood, deviance, dispersion, logarithms."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln, xlogy
from scipy.stats import chi2

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


def poisson_deviance(counts: ArrayLike, expected: ArrayLike) -> NDArray[np.float64]:
    r"""Deviance of each count: twice the log-likelihood lost against a perfect fit.

    Parameters
    ----------
    counts : array
        Observed counts, zero allowed.
    expected : array, broadcast with `counts`
        Expected counts, positive where counts are.

    Returns
    -------
    array
        :math:`2 [N \ln(N / \lambda) - (N - \lambda)]`; about chi-square with one
        degree of freedom when many are expected. Sum it over bins.

    Raises
    ------
    InputError
        If a count or an expected count is negative or not a number.

    Notes
    -----
    Source: S. Baker, R. D. Cousins, Nucl. Instrum. Methods 221 (1984) 437-442, the
    likelihood chi-square for Poisson data.
    """
    n, mean = _checked(counts, expected)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(n > 0.0, n / mean, 1.0)
    # Rounding may leave a hair below zero at a perfect fit.
    return np.asarray(np.maximum(2.0 * (xlogy(n, ratio) - (n - mean)), 0.0))


def poisson_log_likelihood(
    counts: ArrayLike, expected: ArrayLike
) -> NDArray[np.float64]:
    """Logarithm of the Poisson probability of each count."""
    n, mean = _checked(counts, expected)
    return np.asarray(xlogy(n, mean) - mean - gammaln(n + 1.0))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Dispersion:
    """Spread of repeated counts against the spread of a Poisson law.

    Attributes
    ----------
    index : array
        Variance over mean: 1 for Poisson, under 1 with dead time, over 1 with drift,
        flicker or double counting. NaN where the mean is zero.
    statistic : array
        Sum of squared deviations over the mean: chi-square with `degrees`.
    degrees : int
        Number of repeats less one.
    """

    index: NDArray[np.float64]
    statistic: NDArray[np.float64]
    degrees: int


def dispersion(counts: ArrayLike) -> Dispersion:
    """Index of dispersion of repeated counts.

    Parameters
    ----------
    counts : array, shape (repeat, ...)
        At least two repeats of the same exposure.

    Returns
    -------
    Dispersion
        Arrays of shape (...).

    Raises
    ------
    InputError
        If there are fewer than two repeats.

    Notes
    -----
    Source: R. A. Fisher, Statistical Methods for Research Workers, Edinburgh (1925),
    sec. 17; W. G. Cochran, Biometrics 10 (1954) 417.
    """
    n = np.asarray(counts, dtype=np.float64)
    if n.ndim == 0 or n.shape[0] < 2:
        msg = f"dispersion needs two repeats or more, got counts of shape {n.shape}"
        raise InputError(msg)
    degrees = n.shape[0] - 1
    mean = n.mean(axis=0)
    squares = np.sum((n - mean) ** 2, axis=0)
    statistic = np.full(mean.shape, np.nan)
    np.divide(squares, mean, out=statistic, where=mean > 0.0)
    return Dispersion(index=statistic / degrees, statistic=statistic, degrees=degrees)


def dispersion_limits(repeats: int, *, level: float = 0.95) -> tuple[float, float]:
    """Two-sided limits of variance over mean, for Poisson counts.

    Parameters
    ----------
    repeats : int
        Number of exposures, two or more.
    level : float
        Probability inside the limits, shared equally between the two tails.

    Notes
    -----
    From the chi-square law; for means under about 5 it is only a guide.

    Examples
    --------
    >>> [round(limit, 3) for limit in dispersion_limits(20)]
    [0.469, 1.729]
    """
    if repeats < 2:
        msg = f"dispersion needs two repeats or more, got {repeats}"
        raise InputError(msg)
    if not 0.0 < level < 1.0:
        msg = f"level {level!r} must be between 0 and 1"
        raise InputError(msg)
    tail = 0.5 * (1.0 - level)
    low, high = chi2.ppf([tail, 1.0 - tail], repeats - 1) / (repeats - 1)
    return float(low), float(high)


def log_counts(counts: ArrayLike) -> NDArray[np.float64]:
    r"""Logarithm of N + 1/2: nearly unbiased for the log of the mean, even near zero.

    Notes
    -----
    Bias about :math:`-1 / (24 \lambda^2)` for mean :math:`\lambda`, against
    :math:`-1 / (2 \lambda)` of the plain logarithm.
    Source: J. B. S. Haldane, Ann. Hum. Genet. 20 (1956) 309; F. J. Anscombe,
    Biometrika 43 (1956) 461.
    """
    n = np.asarray(counts, dtype=np.float64)
    if np.any(n < 0.0):
        msg = f"counts must not be negative, got {n.min():g}"
        raise InputError(msg)
    return np.asarray(np.log(n + 0.5))


def _checked(
    counts: ArrayLike, expected: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    n = np.asarray(counts, dtype=np.float64)
    mean = np.asarray(expected, dtype=np.float64)
    for name, values in (("counts", n), ("expected counts", mean)):
        if not np.all(values >= 0.0):
            msg = f"{name} must be numbers and not negative"
            raise InputError(msg)
    return n, mean
