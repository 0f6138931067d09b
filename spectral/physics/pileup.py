"""Counts above a threshold when pulses overlap: the level-crossing form."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

from spectral.errors import InputError
from spectral.physics.pulse_family import (
    order_of_tail,
    pulse_integrals,
    tail_height,
    width_over_time,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

NS = 1.0e-9
HEIGHTS = 48
"""Pulse heights that the integrals over overlapping pulses are made for."""
BATCH = 16
SMALLEST_DAMPING = 6.0
"""Frequencies beyond this, over the noise, play no part."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseShape:
    """A semi-Gaussian pulse whose peak may be held for a while.

    It rises and falls as (t / n T)^n exp(n - t / T).

    Attributes
    ----------
    dead_time_ns : float
        How long the pulse stands at its peak; alone, it is a rectangle.
    tail_ns : float
        Time constant T of rise and fall.
    tail_height : float
        Height at the time T after the peak, over the peak; it stands for the order
        n, from 1/e (n = 0: it rises at once and falls exponentially) to 1.
    """

    dead_time_ns: float
    tail_ns: float = 0.0
    tail_height: float = tail_height(1.0)

    @property
    def order(self) -> float:
        """Number n of integrations in the shaper; need not be a whole number."""
        return order_of_tail(self.tail_height)

    @property
    def effective_ns(self) -> float:
        """Time above half the peak."""
        if self.tail_ns == 0.0:
            return self.dead_time_ns
        return self.dead_time_ns + self.tail_ns * width_over_time(self.order)


def crossing_rate(
    pulses: NDArray[np.float64],
    shape: PulseShape,
    *,
    step_kev: float,
    noise_kev: NDArray[np.float64] | float = 0.0,
    size: int = 1024,
) -> NDArray[np.float64]:
    r"""Rates at which the summed signal rises through each level.

    Parameters
    ----------
    pulses : array, shape (case, grid), in 1/s
        Rate of pulses of each height on a grid of ``step_kev`` that starts at 0.
    shape : PulseShape
    step_kev : float
    noise_kev : float or array, shape (case,), in keV
        Standard deviation of the electronic noise at the comparator.
    size : int
        Length of the transform; ``size * step_kev`` must exceed the largest sum of
        pulses that matters plus four times the noise.

    Returns
    -------
    array, shape (case, grid), in 1/s
        Half the mean of :math:`|\dot X|\,\delta(X - U)` at U = 0, step, 2 step ...,
        X the stationary sum of all pulses.

    Raises
    ------
    InputError
        If the transform is too short for the grid, a time is negative, or the tail
        has a height that no order gives.

    Notes
    -----
    With :math:`A(k, l) = \sum_E n_E \int [e^{-iE(kg + l\dot g)} - 1] dt`, D = A(k, l)
    - A(k, 0) and :math:`|y| = \frac1\pi \int (1 - \cos l y)\,dl/l^2`, the transform
    of the rate is

    .. math:: e^{A(k, 0)} \Big[ \frac{n - \hat n(k)}{ik} - \frac1{2\pi}
        \int (e^D - 1 - D) \frac{dl}{l^2} \Big]:

    the part linear in D is known in closed form, pulses that rise alone; so the
    integral holds only pulses that rise or fall together. Exact at any rate, for
    this pulse. Where the peak is held, g' = 0 and only A(k, 0) changes: without rise
    and fall it is the crossing rate of rectangles, :math:`n [F_X(U) - (F_X * s)(U)]`,
    and below the lowest pulse n exp(-n tau), the paralyzable law.
    Source: S. O. Rice, Bell Syst. Tech. J. 24 (1945) 46 (crossings from the joint
    law of signal and slope) and 23 (1944) 282 (shot noise); pile-up as level
    crossing, E. Roessl, H. Daerr, R. Proksa, Med. Phys. 43 (2016) 1295; shot-noise
    crossings by characteristic functions, H. Bierme, A. Desolneux, J. Appl. Probab.
    49 (2012) 100 (from memory). The split is derived here.
    """
    if size < 2 * pulses.shape[1] or min(shape.dead_time_ns, shape.tail_ns) < 0.0:
        msg = (
            f"crossing_rate needs size >= {2 * pulses.shape[1]} and times >= 0, got "
            f"size {size}, {shape.dead_time_ns} ns and {shape.tail_ns} ns"
        )
        raise InputError(msg)
    grid = pulses.shape[1]
    pulses = pulses.copy()
    pulses[:, 0] = 0.0
    transform = fft.rfft(pulses, size, axis=1)
    alone = pulses.sum(axis=1, keepdims=True) - transform
    exponent = -shape.dead_time_ns * NS * alone
    omega = 2.0 * np.pi * np.arange(transform.shape[1]) / (size * step_kev)
    noise = np.broadcast_to(np.asarray(noise_kev, float), pulses.shape[:1])
    if shape.tail_ns > 0.0 and pulses.any():
        least = noise.min() * omega[-1] / SMALLEST_DAMPING
        kept = int(np.ceil(omega.size / max(least, 1.0)))
        level, together = _overlapping(pulses, shape, step_kev, omega[:kept])
        exponent[:, :kept] += level
        few = together.shape[1]
        alone[:, :few] -= 1j * omega[:few] * together
    damping = np.exp(-0.5 * (noise[:, None] * omega[None, :]) ** 2)
    change = fft.irfft(np.exp(exponent) * alone * damping, size, axis=1)
    # noise carries some of the signal at rest below zero: start the sum there
    below = (size - 2 * grid) // 2 + grid
    rolled = np.concatenate([change[:, below:], change[:, :grid]], axis=1)
    reached = np.cumsum(rolled, axis=1) - 0.5 * rolled
    result = reached[:, size - below :]
    return np.asarray(result)


def _overlapping(
    pulses: NDArray[np.float64],
    shape: PulseShape,
    step_kev: float,
    omega: NDArray[np.float64],
) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    """A(k, 0) of rise and fall, and the integral of exp(D) - 1 - D over dl / 2 pi l^2.

    The heights are put on fewer points, with their mean kept.
    """
    top = int(np.flatnonzero(pulses.any(axis=0))[-1])
    group = -(-top // (HEIGHTS - 1))
    integrals = pulse_integrals(
        float(shape.order), HEIGHTS, group * step_kev, omega.size, float(omega[1])
    )
    place = np.arange(top + 1) / group
    spread = np.maximum(1.0 - np.abs(place[:, None] - np.arange(HEIGHTS)), 0.0)
    arriving = shape.tail_ns * NS * (pulses[:, : top + 1] @ spread)
    level = _times(arriving, integrals.level)
    slopes = integrals.share.size
    together = np.empty((pulses.shape[0], integrals.change.shape[1] // slopes), complex)
    for first in range(0, pulses.shape[0], BATCH):
        rows = slice(first, first + BATCH)
        change = _times(arriving[rows], integrals.change)
        beyond = np.exp(change)
        beyond -= 1.0
        beyond -= change
        together[rows] = np.einsum(
            "csk,s->ck", beyond.reshape(beyond.shape[0], slopes, -1), integrals.share
        )
    together /= 2.0 * np.pi * shape.tail_ns * NS
    return level, together


def _times(
    real: NDArray[np.float64], table: NDArray[np.complex128]
) -> NDArray[np.complex128]:
    """Product of a real and a complex matrix."""
    return (real @ table.view(np.float64)).view(np.complex128)
