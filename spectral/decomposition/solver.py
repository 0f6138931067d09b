"""Maximum likelihood of the areal densities in every pixel."""

from __future__ import annotations

import enum
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.decomposition.start_values import StartRegression
from spectral.errors import InputError
from spectral.kernels import fisher_scoring, step_control
from spectral.kernels.pixel_lanes import LANES, MOMENTS

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Array = NDArray[np.float64]
    Weight = NDArray[np.float64] | NDArray[np.float32]

_PIXELS_PER_TASK = 32 * LANES


class SolveOutcome(enum.IntEnum):
    """How the fit of a pixel ended."""

    CONVERGED = step_control.CONVERGED
    STEPS_SPENT = step_control.STEPS_SPENT
    FEW_COUNTS = step_control.FEW_COUNTS
    SINGULAR = step_control.SINGULAR
    UNUSABLE = step_control.UNUSABLE


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Solution:
    """Areal densities of single pixels with their errors.

    Attributes
    ----------
    areal_density : array, shape (pixel, material), in g/cm2
        NaN where `outcome` is SINGULAR or UNUSABLE.
    covariance : array, shape (pixel, m(m+1)/2), in g2/cm4
        Upper triangle, row by row: inverse Fisher information; with the bias
        correction, plus the second-order share that curvature adds at few counts.
    deviance : array, shape (pixel,)
        Per degree of freedom (bins - materials, at least 1).
    steps : array of int64, shape (pixel,)
        Evaluations of the likelihood.
    outcome : array of int64, shape (pixel,)
        Values of `SolveOutcome`. FEW_COUNTS: fewer bins with counts than materials,
        or curvature adds more than half to the variance: finite, far from normal.
        UNUSABLE: a count or dead fraction that is negative or not finite, or a bin
        that would stay empty without an object.
    """

    areal_density: Array
    covariance: Array
    deviance: Array
    steps: NDArray[np.int64]
    outcome: NDArray[np.int64]

    @property
    def standard_error(self) -> Array:
        """One standard deviation, shape (pixel, material), in g/cm2."""
        materials = self.areal_density.shape[1]
        row, column = np.triu_indices(materials)
        return np.sqrt(self.covariance[:, row == column])


def solve(
    counts: ArrayLike,
    weight: Weight,
    attenuation: Array,
    *,
    start: StartRegression | ArrayLike | None = None,
    dead_fraction: ArrayLike = 0.0,
    bias_correction: bool = True,
    nonnegative: bool = False,
    max_steps: int = 50,
    tolerance: float = 3e-5,
    threads: int = 1,
) -> Solution:
    """Areal densities that make the counts of each pixel most likely.

    Parameters
    ----------
    counts : array, shape (pixel, bin), in counts
    weight : array of float64 or float32, shape (pixel or 1, bin, node), in counts
        Share of each energy node in each bin at no attenuation; entries may be
        negative (pile-up), sums over the nodes may not. float32 is solved in single
        precision, half again as fast; it costs 0.03 standard errors at most as long
        as 6e-8 sqrt(counts) sum |weight| / |sum weight| stays below 0.003 in all bins.
    attenuation : array, shape (node, material), in cm2/g
    start : StartRegression or array of shape (material,) or (pixel, material), optional
        Default: a regression fitted to the mean weight.
    dead_fraction : float or array, shape (pixel,), no unit
        See `likelihood.dead_fraction`; 0 for Poisson counts.
    bias_correction : bool
        Solve the score of Firth 1993, free of the first-order bias, instead of the
        likelihood's own.
    nonnegative : bool
        Let no areal density fall below 0. Averages of such estimates are biased near
        0, and `covariance` stays that of the free estimate.
    max_steps : int
    tolerance : float
        Stop when the squared distance that the last step will leave, in standard
        errors and as foreseen, falls to this.
    threads : int
        The result does not depend on it.

    Returns
    -------
    Solution

    Raises
    ------
    InputError
        If shapes do not fit together or an option is out of range.

    Notes
    -----
    Poisson likelihood of independent bins, E. Roessl & R. Proksa 2007, Phys. Med.
    Biol. 52:4679 (from memory); Fisher scoring, C. R. Rao 1948, Proc. Camb. Phil. Soc.
    44:50 (from memory), turning to Newton's step close to the root. With a dead
    fraction it is the quasi-likelihood of the same mean and covariance.
    Near the root a step is two: Newton's, and one from the Taylor series of the
    expectation at its end.

    Examples
    --------
    >>> weight = np.array([[[900.0, 100.0], [100.0, 900.0]]])
    >>> attenuation = np.array([[0.5, 1.5], [0.2, 0.3]])
    >>> truth = np.array([[2.0, 0.3]])
    >>> counts = (weight * np.exp(-truth @ attenuation.T)).sum(axis=2)
    >>> solve(counts, weight, attenuation, bias_correction=False).areal_density.round(3)
    array([[2. , 0.3]])
    """
    counts = np.ascontiguousarray(counts, np.float64)
    _check_shapes(counts, weight, attenuation)
    if max_steps < 1 or threads < 1 or not tolerance >= 0.0:
        msg = (
            f"max_steps must be at least 1, threads 1 and tolerance 0, "
            f"got {max_steps}, {threads} and {tolerance}"
        )
        raise InputError(msg)
    pixels, materials = len(counts), attenuation.shape[1]
    kind = np.float32 if weight.dtype == np.float32 else np.float64
    own: Any = np.ascontiguousarray(weight, kind)
    dead = np.atleast_1d(np.array(dead_fraction, np.float64))
    if dead.shape not in {(1,), (pixels,)}:
        msg = f"dead_fraction must be a number or {pixels} of them, got {dead.shape}"
        raise InputError(msg)
    minus: Any
    factor: Any
    minus, factor = (part.astype(kind) for part in _node_factors(attenuation))
    given, regression = _resolve_start(start, pixels, own, attenuation)
    coefficients: Any = np.array(regression.coefficients, kind)
    lowest, highest = np.array(regression.lowest), np.array(regression.highest)
    if nonnegative:
        lowest = np.maximum(lowest, 0.0)
    found = Solution(
        areal_density=np.empty((pixels, materials)),
        covariance=np.empty((pixels, materials * (materials + 1) // 2)),
        deviance=np.empty(pixels),
        steps=np.empty(pixels, np.int64),
        outcome=np.empty(pixels, np.int64),
    )

    def run(first: int) -> None:
        part = slice(first, first + _PIXELS_PER_TASK)
        fisher_scoring.fit_pixels(
            _writeable(counts[part]),
            _writeable(own[part] if len(own) > 1 else own),
            minus,
            factor,
            dead[part] if len(dead) > 1 else dead,
            given[part] if len(given) > 1 else given,
            coefficients,
            lowest,
            highest,
            bias_correction,
            nonnegative,
            max_steps,
            tolerance,
            found.areal_density[part],
            found.covariance[part],
            found.deviance[part],
            found.steps[part],
            found.outcome[part],
        )

    tasks = range(0, pixels, _PIXELS_PER_TASK)
    if threads == 1:
        for first in tasks:
            run(first)
    else:
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(run, tasks))
    return found


def _check_shapes(counts: Array, weight: Weight, attenuation: Array) -> None:
    """Refuse arrays that do not fit together."""
    if counts.ndim != 2 or weight.ndim != 3 or attenuation.ndim != 2:
        msg = (
            "counts must be (pixel, bin), weight (pixel or 1, bin, node) and "
            f"attenuation (node, material), got shapes {counts.shape}, "
            f"{weight.shape} and {attenuation.shape}"
        )
        raise InputError(msg)
    if weight.shape[0] not in {1, counts.shape[0]}:
        msg = f"weight has {weight.shape[0]} pixels, counts have {counts.shape[0]}"
        raise InputError(msg)
    if weight.shape[1] != counts.shape[1]:
        msg = f"weight has {weight.shape[1]} bins, counts have {counts.shape[1]}"
        raise InputError(msg)
    if weight.shape[2] != attenuation.shape[0]:
        msg = f"weight has {weight.shape[2]} nodes, attenuation {attenuation.shape[0]}"
        raise InputError(msg)
    if not 1 <= attenuation.shape[1] <= counts.shape[1]:
        msg = (
            f"{counts.shape[1]} bins cannot tell {attenuation.shape[1]} materials apart"
        )
        raise InputError(msg)
    if not np.all(np.isfinite(attenuation)):
        msg = "attenuation must be finite"
        raise InputError(msg)


def _writeable(array: Array) -> Array:
    """Array itself or, if it is read-only, a copy: spares compiling another kernel."""
    return array if array.flags.writeable else array.copy()


def _node_factors(attenuation: Array) -> tuple[Array, Array]:
    """-M and the factors of the moments, padded by zeros as the kernel wants."""
    nodes, materials = attenuation.shape
    minus = np.zeros((nodes + -nodes % 4, materials))
    minus[:nodes] = -attenuation
    row, column = np.triu_indices(materials)
    moments = 1 + materials + len(row)
    factor = np.zeros((moments + -moments % MOMENTS, len(minus)))
    factor[0, :nodes] = 1.0
    factor[1 : 1 + materials] = minus.T
    factor[1 + materials : moments] = (minus[:, row] * minus[:, column]).T
    return minus, factor


def _resolve_start(
    start: StartRegression | ArrayLike | None,
    pixels: int,
    weight: Weight,
    attenuation: Array,
) -> tuple[Array, StartRegression]:
    """Start values if given, and the regression that takes over if not."""
    bins, materials = weight.shape[1], attenuation.shape[1]
    features = 1 + bins + bins * (bins + 1) // 2
    if start is None:
        usable = np.isfinite(weight).all(axis=(1, 2))
        if pixels == 0 or not usable.any():
            start = np.zeros(materials)
        else:
            mean = weight[usable].mean(axis=0, dtype=np.float64)
            start = StartRegression.fit(mean, attenuation)
    if isinstance(start, StartRegression):
        if start.coefficients.shape != (features, materials):
            msg = (
                f"start was fitted for other bins or materials: it has coefficients "
                f"{start.coefficients.shape}, wanted {(features, materials)}"
            )
            raise InputError(msg)
        return np.empty((0, materials)), start
    given = np.atleast_2d(np.array(start, np.float64))
    if given.shape not in {(1, materials), (pixels, materials)}:
        msg = (
            f"start must be ({materials},) or ({pixels}, {materials}), "
            f"got {np.shape(start)}"
        )
        raise InputError(msg)
    free = np.full(materials, np.inf)
    unused = StartRegression(
        coefficients=np.zeros((features, materials)), lowest=-free, highest=free
    )
    return given, unused
