"""How a charge cloud divides between square pixels."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import erf, ndtr

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

THERMAL_VOLTAGE_V = 0.02585
"""kT/q at 300 K, in V."""


def collected_fraction(
    x_um: NDArray[np.float64],
    y_um: NDArray[np.float64],
    *,
    pitch_um: float,
    sigma_um: float,
) -> NDArray[np.float64]:
    r"""Fraction of a Gaussian cloud at (x, y) inside the pixel [0, pitch]^2.

    Parameters
    ----------
    x_um, y_um : arrays of one shape, in um
    pitch_um, sigma_um : float, in um
        Pixel side, and standard deviation of the cloud on each axis.

    Returns
    -------
    array of the same shape, between 0 and 1
        :math:`h(x)\,h(y)` with :math:`h(x) = \frac12[\mathrm{erf}((p-x)/\sqrt2
        \sigma) + \mathrm{erf}(x/\sqrt2\sigma)]`.

    Notes
    -----
    Source: integral of the normal density over a square; no approximation.
    """
    scale = np.sqrt(2.0) * sigma_um

    def along(u: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(0.5 * (erf((pitch_um - u) / scale) + erf(u / scale)))

    return along(np.asarray(x_um)) * along(np.asarray(y_um))


def mean_counts_per_photon(
    threshold_fraction: float, *, pitch_um: float, sigma_um: float, steps: int = 4000
) -> float:
    """Mean counts over all pixels per absorbed photon, by charge sharing alone.

    Parameters
    ----------
    threshold_fraction : float
        Threshold over photon energy, between 0 and 1 (both excluded).
    pitch_um, sigma_um : float, in um
    steps : int
        Midpoints of the integral along x.

    Returns
    -------
    float
        Area of {h(x) h(y) > t} over the pixel's area: above 1 where photons count
        twice (t < 1/2), below 1 where shared photons are lost.

    Raises
    ------
    InputError
        If the fraction is not between 0 and 1.

    Notes
    -----
    Source: exact area for the square pixel; for each x the range of y is found by
    bisection on the monotonic half of h. The straight-edge form (1 + 2d/p)^2 with
    d = sigma * ndtri(1 - t) is 1-6 % higher for usual pixels.
    """
    if not 0.0 < threshold_fraction < 1.0:
        msg = f"threshold_fraction must lie between 0 and 1, got {threshold_fraction}"
        raise InputError(msg)
    reach = 8.0 * sigma_um
    half = 0.5 * pitch_um

    def profile(u: NDArray[np.float64]) -> NDArray[np.float64]:
        # u is the distance from the pixel's centre; falls monotonically with |u|
        return np.asarray(ndtr((half - u) / sigma_um) - ndtr((-half - u) / sigma_um))

    width = (half + reach) / steps
    x = np.asarray((np.arange(steps) + 0.5) * width, np.float64)
    needed = threshold_fraction / np.maximum(profile(x), 1e-300)
    low = np.zeros(steps)
    high = np.full(steps, half + reach)
    for _ in range(60):
        middle = 0.5 * (low + high)
        inside = profile(middle) > needed
        low = np.where(inside, middle, low)
        high = np.where(inside, high, middle)
    extent = np.where(profile(np.zeros(steps)) > needed, low, 0.0)
    return float(4.0 * np.sum(extent) * width / pitch_um**2)


def diffusion_variance_per_um(*, thickness_um: float, bias_v: float) -> float:
    """Variance that a charge cloud gains per um of drift, in um.

    Parameters
    ----------
    thickness_um : float
        Sensor thickness, in um.
    bias_v : float
        Bias across it, in V; the field is taken as uniform.

    Returns
    -------
    float
        2 (kT/q) d / V, in um2 per um.

    Raises
    ------
    InputError
        If the bias is not positive.

    Notes
    -----
    Source: Einstein relation D = mu kT/q with drift time z d / (mu V); textbook.
    """
    if bias_v <= 0.0:
        msg = f"bias_v must be positive, got {bias_v}"
        raise InputError(msg)
    return 2.0 * THERMAL_VOLTAGE_V * thickness_um / bias_v
