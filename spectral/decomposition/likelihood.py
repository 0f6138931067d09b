"""Likelihood of bin counts: expectation, information, bound and deviance.

Pure functions on arrays, for planning, reports and tests; `solver` has the same
formulas compiled. The covariance of a pixel's counts is
C = diag(lambda) - c lambda lambda', c the dead fraction (0: Poisson), so that
x' C^-1 y = sum_b x_b y_b / lambda_b + k (sum x) (sum y) with k = c / (1 - c sum lambda)
(Sherman & Morrison 1950, Ann. Math. Stat. 21:124).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Array = NDArray[np.float64]
    Weight = NDArray[np.float64] | NDArray[np.float32]


def dead_fraction(dead_time_s: float, count_time_s: float) -> float:
    """Fraction c by which a dead time takes covariance from the recorded counts.

    Parameters
    ----------
    dead_time_s, count_time_s : float, in s
        After each recorded pulse nothing is recorded for `dead_time_s`.

    Returns
    -------
    float, no unit
        2 x - x^2 with x = dead time / count time: pairs of recorded pulses closer
        than the dead time are missing, and the variance of the counts with them.

    Raises
    ------
    InputError
        If the dead time is negative or not below the count time.

    Notes
    -----
    Source: Yu & Fessler 2000, Phys. Med. Biol. 45:2043 (variance of the paralysable
    counter, from memory).

    Examples
    --------
    >>> round(dead_fraction(1e-7, 1e-3), 12)
    0.00019999
    """
    x = dead_time_s / count_time_s if count_time_s > 0.0 else np.inf
    if not 0.0 <= x < 1.0:
        msg = (
            f"dead_time_s must be at least 0 and below count_time_s, "
            f"got {dead_time_s} and {count_time_s}"
        )
        raise InputError(msg)
    return 2.0 * x - x * x


def expected_counts(areal_density: Array, weight: Weight, attenuation: Array) -> Array:
    """Expected counts of each bin.

    Parameters
    ----------
    areal_density : array, shape (..., material), in g/cm2
    weight : array, shape (..., bin, node), in counts
        Share of each energy node in each bin at no attenuation.
    attenuation : array, shape (node, material), in cm2/g

    Returns
    -------
    array, shape (..., bin), in counts
        Beer-Lambert law summed over the nodes.
    """
    transmission = np.exp(-areal_density @ attenuation.T)
    return np.asarray(np.einsum("...bn,...n->...b", weight, transmission))


def count_derivatives(
    areal_density: Array, weight: Weight, attenuation: Array
) -> tuple[Array, Array]:
    """First and second derivatives of the expected counts by areal density.

    Parameters
    ----------
    areal_density, weight, attenuation
        As for `expected_counts`.

    Returns
    -------
    array, shape (..., bin, material), in counts per g/cm2
    array, shape (..., bin, material, material), in counts per (g/cm2)^2
    """
    parts = weight * np.exp(-areal_density @ attenuation.T)[..., None, :]
    pairs = attenuation[:, :, None] * attenuation[:, None, :]
    return -(parts @ attenuation), np.einsum("...bn,njk->...bjk", parts, pairs)


def inverse_covariance_product(
    left: Array, right: Array, expected: Array, dead: ArrayLike = 0.0
) -> Array:
    """Product left' C^-1 right, with C the covariance of the counts.

    Parameters
    ----------
    left : array, shape (..., bin, i)
    right : array, shape (..., bin, j)
    expected : array, shape (..., bin), in counts
    dead : float or array, shape (...), no unit
        See `dead_fraction`.

    Returns
    -------
    array, shape (..., i, j)
    """
    c = np.asarray(dead, np.float64)
    kappa = c / (1.0 - c * expected.sum(axis=-1))
    whole = left.sum(axis=-2)[..., :, None] * right.sum(axis=-2)[..., None, :]
    product = np.einsum("...bi,...bj,...b->...ij", left, right, 1.0 / expected)
    return np.asarray(product + kappa[..., None, None] * whole)


def fisher_information(
    expected: Array, derivative: Array, *, dead: ArrayLike = 0.0
) -> Array:
    """Fisher information of the areal densities in one pixel's counts.

    Parameters
    ----------
    expected : array, shape (..., bin), in counts
    derivative : array, shape (..., bin, material), in counts per g/cm2
    dead : float or array, shape (...), no unit
        See `dead_fraction`.

    Returns
    -------
    array, shape (..., material, material), in (g/cm2)^-2
        D' C^-1 D; informations of independent counts add up.

    Raises
    ------
    InputError
        If the bins of `expected` and `derivative` differ in number, or an expected
        count is not above 0.

    Notes
    -----
    Source: Kay 1993, Fundamentals of Statistical Signal Processing, vol. 1,
    Prentice-Hall, section 3.9, without the small term of the covariance's own
    dependence on the areal densities (from memory).

    Examples
    --------
    >>> fisher_information(np.array([100.0]), np.array([[-20.0]]))
    array([[4.]])
    """
    if derivative.shape[:-1][-1] != expected.shape[-1]:
        msg = (
            f"derivative has {derivative.shape[-2]} bins, "
            f"expected has {expected.shape[-1]}"
        )
        raise InputError(msg)
    if not np.all(expected > 0.0):
        msg = f"expected counts must be above 0, got {np.min(expected)}"
        raise InputError(msg)
    return inverse_covariance_product(derivative, derivative, expected, dead)


def cramer_rao_bound(information: Array) -> Array:
    """Smallest covariance that an unbiased estimate can have.

    Parameters
    ----------
    information : array, shape (..., material, material), in (g/cm2)^-2

    Returns
    -------
    array, shape (..., material, material), in (g/cm2)^2
        Inverse of the information.

    Raises
    ------
    InputError
        If an information is singular: the counts do not tell the materials apart.

    Notes
    -----
    Source: Cramer 1946, Mathematical Methods of Statistics, section 32.6; Rao 1945,
    Bull. Calcutta Math. Soc. 37:81 (from memory).
    """
    scale = np.sqrt(np.einsum("...jj->...j", information))
    with np.errstate(all="ignore"):
        unit = information / (scale[..., :, None] * scale[..., None, :])
    if not np.all(np.isfinite(unit)) or np.any(np.linalg.eigvalsh(unit) < 1e-13):
        msg = "information is singular: these bins do not tell the materials apart"
        raise InputError(msg)
    inverse = np.linalg.inv(unit)
    return np.asarray(inverse / (scale[..., :, None] * scale[..., None, :]))


def deviance(counts: Array, expected: Array, *, dead: ArrayLike = 0.0) -> Array:
    """Deviance of counts from their expectation.

    Parameters
    ----------
    counts, expected : arrays, shape (..., bin), in counts
    dead : float or array, shape (...), no unit
        See `dead_fraction`.

    Returns
    -------
    array, shape (...), no unit
        2 sum [N ln(N / lambda) - (N - lambda)] + k (sum (N - lambda))^2; about
        chi-square with (bins - materials) degrees of freedom where the model holds
        and counts are not few.

    Notes
    -----
    Source: Baker & Cousins 1984, Nucl. Instrum. Meth. 221:437 (from memory), for the
    Poisson part; the last term is the dead time's share of r' C^-1 r.

    Examples
    --------
    >>> deviance(np.array([0.0, 4.0]), np.array([1.0, 4.0]))
    array(2.)
    """
    ratio = np.where(counts > 0.0, counts, 1.0) / np.where(counts > 0.0, expected, 1.0)
    poisson = 2.0 * (counts * np.log(ratio) - counts + expected).sum(axis=-1)
    c = np.asarray(dead, np.float64)
    kappa = c / (1.0 - c * expected.sum(axis=-1))
    return np.asarray(poisson + kappa * (counts - expected).sum(axis=-1) ** 2)
