"""Counting with dead time: means, exact variances, inverses, two-source method.

n is the true rate, tau the dead time, x = n tau, T the time counted. The counter is in
its steady state when counting starts. "Paralyzable": each pulse, recorded or not,
starts the dead time anew. "Non-paralyzable": only a recorded pulse does.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy.special import lambertw

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

CountingModel = Literal["paralyzable", "non-paralyzable"]
COUNTING_MODELS: tuple[CountingModel, ...] = ("paralyzable", "non-paralyzable")


def recorded_rate(
    true_rate: ArrayLike, dead_time_s: ArrayLike, *, model: CountingModel
) -> NDArray[np.float64]:
    """Recorded pulses per second, from true pulses per second and dead time in s.

    Source: G. F. Knoll, Radiation Detection and Measurement, ch. 4, sec. VII (from
    memory).
    """
    rate, dead = _checked_rate(true_rate, dead_time_s, model)
    x = rate * dead
    if model == "paralyzable":
        return np.asarray(rate * np.exp(-x))
    return np.asarray(rate / (1.0 + x))


def true_rate(
    recorded: ArrayLike, dead_time_s: ArrayLike, *, model: CountingModel
) -> NDArray[np.float64]:
    """True pulses per second, from recorded pulses per second: lower branch.

    Returns
    -------
    array
        NaN where no true rate gives the recorded one: at or above 1 / tau
        (non-paralyzable), above 1 / (e tau) (paralyzable). The paralyzable curve has
        a second branch, x > 1, that the recorded rate alone cannot tell.

    Notes
    -----
    Source: R. M. Corless et al., Adv. Comput. Math. 5 (1996) 329 (Lambert W); n =
    -W0(-m tau) / tau.
    """
    rate, dead = _checked_rate(recorded, dead_time_s, model)
    y = rate * dead
    if model == "non-paralyzable":
        live = np.where(y < 1.0, 1.0 - y, np.nan)
        return np.asarray(rate / live)
    possible = np.where(y <= np.exp(-1.0), y, np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        correction = np.where(y > 0.0, -lambertw(-possible).real / y, 1.0)
    return np.asarray(rate * correction)


def mean_counts(
    true_rate: ArrayLike,
    time_s: ArrayLike,
    dead_time_s: ArrayLike,
    *,
    model: CountingModel,
) -> NDArray[np.float64]:
    """Expected number of recorded pulses in `time_s` seconds."""
    rate = recorded_rate(true_rate, dead_time_s, model=model)
    return np.asarray(rate * np.asarray(time_s, dtype=np.float64))


def variance_counts(
    true_rate: ArrayLike,
    time_s: ArrayLike,
    dead_time_s: ArrayLike,
    *,
    model: CountingModel,
) -> NDArray[np.float64]:
    r"""Variance of the number of recorded pulses, finite-time terms included.

    Returns
    -------
    array
        Paralyzable, exact for T >= tau:
        :math:`n T e^{-x} [1 - (2x - x \tau / T) e^{-x}]`.
        Non-paralyzable, to terms that die out exponentially in T / tau:
        :math:`n T / (1+x)^3 + x^2 (6 + 4x + x^2) / [6 (1+x)^4]`.

    Raises
    ------
    InputError
        If an argument is negative or the time is shorter than the dead time.

    Notes
    -----
    Always below the mean: Poisson error bars are too wide.
    Source: D. F. Yu, J. A. Fessler, Phys. Med. Biol. 45 (2000) 2043 (paralyzable);
    J. W. Mueller, Nucl. Instrum. Methods 112 (1973) 47 (non-paralyzable, equilibrium
    start). Both formulas from memory and checked by simulation.
    """
    rate, dead = _checked_rate(true_rate, dead_time_s, model)
    time = np.asarray(time_s, dtype=np.float64)
    if not np.all(time >= dead) or np.any(time <= 0.0):
        msg = "the time counted must be positive and no shorter than the dead time"
        raise InputError(msg)
    x = rate * dead
    if model == "paralyzable":
        shortfall = (2.0 * x - x * dead / time) * np.exp(-x)
        return np.asarray(rate * time * np.exp(-x) * (1.0 - shortfall))
    start = x**2 * (6.0 + 4.0 * x + x**2) / (6.0 * (1.0 + x) ** 4)
    return np.asarray(rate * time / (1.0 + x) ** 3 + start)


def bin_covariance(
    mean_total: ArrayLike, variance_total: ArrayLike, bin_share: ArrayLike
) -> NDArray[np.float64]:
    """Covariance of the counts in energy bins, when dead time acts on their total.

    Parameters
    ----------
    mean_total, variance_total : array, shape (...)
        Mean and variance of the total count.
    bin_share : array, shape (..., bin)
        Probability that a recorded pulse falls into the bin; sums to 1 or less.

    Returns
    -------
    array, shape (..., bin, bin)
        Mean total times share on the diagonal, plus share times share times
        (variance - mean). Negative off the diagonal with dead time.

    Notes
    -----
    Takes the energies of successive recorded pulses as independent: pile-up within a
    pulse may change the shares, but does not link neighbours. For independent
    marks this is the law of total covariance.
    """
    mean = np.asarray(mean_total, dtype=np.float64)[..., None, None]
    variance = np.asarray(variance_total, dtype=np.float64)[..., None, None]
    share = np.asarray(bin_share, dtype=np.float64)
    if np.any(share < 0.0) or np.any(share.sum(axis=-1) > 1.0 + 1e-9):
        msg = "bin_share must not be negative nor sum to more than 1"
        raise InputError(msg)
    outer = share[..., :, None] * share[..., None, :]
    return np.asarray(
        outer * (variance - mean) + mean * share[..., None] * np.eye(share.shape[-1])
    )


def two_source_dead_time(
    first: float, second: float, both: float, background: float = 0.0
) -> float:
    """Non-paralyzable dead time in s from two sources, alone and together.

    Parameters
    ----------
    first, second, both : float, in 1/s
        Recorded rates, background included.
    background : float, in 1/s
        Recorded rate with neither source.

    Returns
    -------
    float, in s

    Raises
    ------
    InputError
        If the rates do not determine a dead time: `both` must be less than `first`
        + `second` - `background`, and more than each.

    Notes
    -----
    Source: G. F. Knoll, Radiation Detection and Measurement, ch. 4, sec. VII (from
    memory).

    Examples
    --------
    >>> round(two_source_dead_time(823, 440, 1164, 13) * 1e6, 1)
    134.5
    """
    lost = first + second - both - background
    if not (lost >= 0.0 and both > max(first, second) >= 0.0 and background >= 0.0):
        msg = (
            f"two sources at {first:g} and {second:g} 1/s, {both:g} 1/s together and "
            f"{background:g} 1/s background give no dead time"
        )
        raise InputError(msg)
    x = first * second - background * both
    y = first * second * (both + background) - background * both * (first + second)
    z = y * lost / x**2
    # X (1 - sqrt(1 - Z)) / Y, without the difference of near-equal numbers. The
    # check above makes x > (both - first) (both - second) > 0 and z <= 1.
    return lost / (x * (1.0 + math.sqrt(max(1.0 - z, 0.0))))


def _checked_rate(
    rate: ArrayLike, dead_time_s: ArrayLike, model: CountingModel
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    if model not in COUNTING_MODELS:
        msg = f"counting model {model!r} is unknown: use one of {COUNTING_MODELS}"
        raise InputError(msg)
    per_s = np.asarray(rate, dtype=np.float64)
    dead = np.asarray(dead_time_s, dtype=np.float64)
    if not (np.all(per_s >= 0.0) and np.all(dead >= 0.0)):
        msg = "rates and dead times must be numbers and not negative"
        raise InputError(msg)
    return per_s, dead
