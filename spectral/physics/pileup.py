"""Counts above a threshold when pulses overlap: the level-crossing form."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

NS = 1.0e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseShape:
    """A pulse that rises at once and falls in two steps.

    Attributes
    ----------
    dead_time_ns : float
        How long the pulse stands at full height.
    tail_ns : float
        How long it then stands at ``tail_height`` of it, before it ends.
    tail_height : float
        Between 0 and 1.
    """

    dead_time_ns: float
    tail_ns: float = 0.0
    tail_height: float = 0.5

    @property
    def effective_ns(self) -> float:
        """Dead time of a counter with the same loss for pulses of one height."""
        return self.dead_time_ns + self.tail_height * self.tail_ns


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
        :math:`R(U) = n\,[F_X(U) - (F_X * s)(U)]` at U = 0, step, 2 step ...; n the
        rate of all pulses, s their height distribution, X the stationary signal
        just before an arrival, with characteristic function :math:`\exp\{n \sum_j
        \tau_j[\varphi_s(g_j k) - 1]\}` over the steps (height g, duration tau).

    Raises
    ------
    InputError
        If the transform is too short for the grid, or a time is negative.

    Notes
    -----
    Up-crossings happen only at arrivals when a pulse rises at once and never rises
    again. Below the lowest pulse height R = n exp(-n tau), the paralyzable law.
    Valid for any rate within the model; a detector's own pulse departs from it.
    Source: level-crossing view of pile-up, E. Roessl, H. Daerr, R. Proksa, Med.
    Phys. 43 (2016) 1295; compound-Poisson form derived here, S. O. Rice, Bell
    Syst. Tech. J. 23 (1944) 282 for shot noise.
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
    total = pulses.sum(axis=1, keepdims=True)
    exponent = shape.dead_time_ns * NS * (transform - total)
    if shape.tail_ns > 0.0:
        lowered = fft.rfft(_scaled(pulses, shape.tail_height), size, axis=1)
        exponent = exponent + shape.tail_ns * NS * (lowered - total)
    omega = 2.0 * np.pi * np.arange(transform.shape[1]) / (size * step_kev)
    noise = np.broadcast_to(np.asarray(noise_kev, float), pulses.shape[:1])
    damping = np.exp(-0.5 * (noise[:, None] * omega[None, :]) ** 2)
    change = fft.irfft(np.exp(exponent) * (total - transform) * damping, size, axis=1)
    # noise carries some of the signal at rest below zero: start the sum there
    below = (size - 2 * grid) // 2 + grid
    rolled = np.concatenate([change[:, below:], change[:, :grid]], axis=1)
    reached = np.cumsum(rolled, axis=1) - 0.5 * rolled
    result = reached[:, size - below :]
    return np.asarray(result)


def _scaled(pulses: NDArray[np.float64], factor: float) -> NDArray[np.float64]:
    """Pulse heights multiplied by ``factor``, split between grid points."""
    place = factor * np.arange(pulses.shape[1])
    cell = place.astype(np.int64)
    part = place - cell
    out = np.zeros_like(pulses)
    for source, (target, share) in enumerate(zip(cell, part, strict=True)):
        out[:, target] += pulses[:, source] * (1.0 - share)
        out[:, target + 1] += pulses[:, source] * share
    return out
