"""Integrals over a semi-Gaussian pulse: what shot noise of such pulses needs."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import brentq

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

RISE_PANELS, FALL_PANELS, PANEL_NODES = 2, 4, 8
PER_DECADE, DECADES = 8, 4
"""Nodes of the integral over the variable that belongs to the slope."""
LEAST_SLOPE = 0.3
"""First of these nodes, over the height of the largest pulse."""
REACH = 110.0
"""Largest frequency of the integrals, times the height of the largest pulse."""
KEPT = 8
ORDERS = (0.05, 200.0)
"""Orders of pulses that the quadrature holds for."""


def tail_height(order: float) -> float:
    """Height one time constant after the peak, over the peak.

    Examples
    --------
    >>> round(tail_height(1.0), 4)  # 2 / e
    0.7358
    """
    return float(np.exp(order * np.log1p(1.0 / order) - 1.0))


@lru_cache(maxsize=64)
def order_of_tail(height: float) -> float:
    """Order that `tail_height` belongs to.

    Raises
    ------
    InputError
        If the height is not that of an order from `ORDERS`.
    """
    low, high = map(tail_height, ORDERS)
    if not low <= height <= high:
        msg = (
            f"tail_height must lie in {low:.4f} to {high:.4f}, got {height}: height "
            "of a pulse one time constant after its peak"
        )
        raise InputError(msg)
    found = brentq(lambda x: tail_height(np.exp(x)) - height, *np.log(ORDERS))
    return float(np.exp(found))


def width_over_time(order: float) -> float:
    """Time above half the peak, in units of the time constant."""

    def above(t: float) -> float:
        return float(order * (np.log(t / order) + 1.0 - t / order) + np.log(2.0))

    low = brentq(above, order * np.exp(-1.0 - np.log(2.0) / order), order)
    high = brentq(above, order, 4.0 * order + 4.0)
    return float(high - low)


def pulse_nodes(
    order: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Pulse, its slope, and quadrature weights; time in units of the time constant.

    Parameters
    ----------
    order : float
        n in g(t) = (t/n)^n exp(n - t), which has its peak 1 at t = n.

    Notes
    -----
    Gauss-Legendre panels; on the rise t = n v^p, with p = 1/n for n < 1, takes away
    the steep start. Source: semi-Gaussian shaping, one differentiation and n
    integrations of the same time constant: G. F. Knoll, Radiation Detection and
    Measurement, ch. 16 (from memory).
    """
    node, weight = np.polynomial.legendre.leggauss(PANEL_NODES)

    def panels(
        edges: NDArray[np.float64],
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        middle = 0.5 * (edges[1:] + edges[:-1])
        half = 0.5 * np.diff(edges)
        place = middle[:, None] + half[:, None] * node
        return place.ravel(), (half[:, None] * weight).ravel()

    power = max(1.0, 1.0 / order)
    v, rise = panels(np.linspace(0.0, 1.0, RISE_PANELS + 1))
    length = 3.0 * np.sqrt(order) + 12.0
    u, fall = panels(np.linspace(0.0, 1.0, FALL_PANELS + 1) ** 1.5)
    t = np.concatenate([order * v**power, order + length * u])
    w = np.concatenate([order * power * v ** (power - 1.0) * rise, length * fall])
    pulse = np.exp(order * (np.log(t / order) + 1.0) - t)
    return pulse, pulse * (order / t - 1.0), w


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PulseIntegrals:
    """Integrals over the pulse for a grid of heights, frequencies and slope nodes.

    With E the height and time in units of the time constant:

    Attributes
    ----------
    level : array, shape (height, frequency)
        Integral of exp(-i E k g) - 1.
    change : array, shape (height, slope * few)
        Integral of exp(-i E (k g + l g')) - 1, less ``level``; k runs fastest, over
        the first few frequencies.
    share : array, shape (slope,)
        Weights that integrate over dl / l^2 from minus to plus infinity.
    """

    level: NDArray[np.complex128]
    change: NDArray[np.complex128]
    share: NDArray[np.float64]


@lru_cache(maxsize=KEPT)
def pulse_integrals(
    order: float, heights: int, spacing_kev: float, frequencies: int, step: float
) -> PulseIntegrals:
    """Integrals for heights 0, spacing, ... and frequencies 0, step, ...

    Parameters
    ----------
    order : float
    heights : int
        Number of heights.
    spacing_kev : float
    frequencies : int
        Number of frequencies.
    step : float, in 1/keV

    Returns
    -------
    PulseIntegrals
        With the slope only up to frequency `REACH` over the largest height: what
        overlaps is smooth in the level.

    Notes
    -----
    The integrand over the logarithm of l is smooth and dies out on both sides: the
    trapezoidal rule converges quickly. Beyond the last node it is constant.
    """
    pulse, slope, weight = pulse_nodes(order)
    energy = spacing_kev * np.arange(heights)
    k = step * np.arange(frequencies)
    spacing = np.log(10.0) / PER_DECADE
    first = LEAST_SLOPE / energy[-1]
    node = first * np.exp(spacing * np.arange(PER_DECADE * DECADES + 1))
    share = spacing / node
    share[-1] /= -np.expm1(-spacing)
    node = np.concatenate([node, -node])
    by_level = np.exp(-1j * energy[:, None, None] * (pulse[:, None] * k))
    by_slope = np.exp(-1j * energy[:, None, None] * (node[:, None] * slope)) * weight
    few = min(frequencies, int(REACH / energy[-1] / step) + 1)
    level = by_level.transpose(0, 2, 1) @ weight - weight.sum()
    change = by_slope @ by_level[:, :, :few] - weight.sum() - level[:, None, :few]
    return PulseIntegrals(
        level=level,
        change=change.reshape(heights, -1),
        share=np.concatenate([share, share]),
    )
