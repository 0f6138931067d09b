"""One areal density common to many pixels and repeats."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.decomposition.likelihood import (
    count_derivatives,
    deviance,
    expected_counts,
    inverse_covariance_product,
)
from spectral.decomposition.solver import SolveOutcome, solve
from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Array = NDArray[np.float64]

_HALVINGS = 30
_SAMPLES_AT_ONCE = 4096


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class JointEstimate:
    """Areal densities of a region.

    Attributes
    ----------
    areal_density : array, shape (material,), in g/cm2
        NaN where `outcome` is SINGULAR or UNUSABLE.
    covariance : array, shape (material, material), in g2/cm4
        Inverse of the summed Fisher information.
    deviance : float
        Summed over the samples, per degree of freedom.
    samples : int
        Pixels times repeats that took part.
    steps : int
    outcome : SolveOutcome
    """

    areal_density: Array
    covariance: Array
    deviance: float
    samples: int
    steps: int
    outcome: SolveOutcome


def joint_estimate(
    counts: ArrayLike,
    weight: Array,
    attenuation: Array,
    *,
    start: ArrayLike | None = None,
    dead_fraction: ArrayLike = 0.0,
    bias_correction: bool = True,
    max_steps: int = 60,
    tolerance: float = 1e-12,
) -> JointEstimate:
    """Areal densities that make all samples' counts together most likely.

    Parameters
    ----------
    counts : array, shape (sample, bin), in counts
        Every pixel and repeat of the region; zeros are data like any other.
    weight : array, shape (sample or 1, bin, node), in counts
    attenuation : array, shape (node, material), in cm2/g
    start : array, shape (material,), in g/cm2, optional
        Default: the fit of the summed counts to the summed weights.
    dead_fraction : float or array, shape (sample,), no unit
    bias_correction : bool
        Remove the first-order bias (Cox & Snell 1968, J. R. Stat. Soc. B 30:248), by
        the score of Firth 1993, Biometrika 80:27.
    max_steps : int
    tolerance : float
        Stop when the squared step, in standard errors, falls to this.

    Returns
    -------
    JointEstimate

    Raises
    ------
    InputError
        If shapes do not fit together.

    Notes
    -----
    Log-likelihoods of independent samples add up, so scores and informations do. The
    mean of single-pixel estimates is no substitute: it keeps their common bias, and
    pixels with few counts may have none.
    """
    data = np.asarray(counts, np.float64)
    _check(data, weight, attenuation)
    dead = np.broadcast_to(np.asarray(dead_fraction, np.float64), len(data))
    usable = np.isfinite(data).all(axis=1) & (data >= 0.0).all(axis=1)
    usable &= np.isfinite(weight).all(axis=(1, 2)) & (weight.sum(axis=2) > 0.0).all(1)
    data, dead = data[usable], dead[usable]
    weight = weight[usable] if len(weight) > 1 else weight
    if len(data) == 0:
        return _without_estimate(attenuation.shape[1], 0, 0, SolveOutcome.UNUSABLE)
    if start is None:
        base = _pooled_start(data, weight, attenuation)
    else:
        base = np.array(start, np.float64)
    score, information = _sums(base, data, weight, attenuation, dead, bias_correction)
    if not np.isfinite(score).all():
        base = np.zeros(attenuation.shape[1])
        score, information = _sums(
            base, data, weight, attenuation, dead, bias_correction
        )
    outcome, steps = SolveOutcome.STEPS_SPENT, 0
    while steps < max_steps:
        steps += 1
        inverse = _invert(information)
        if inverse is None:
            return _without_estimate(len(base), len(data), steps, SolveOutcome.SINGULAR)
        move = inverse @ score
        slope = float(score @ move)
        if slope <= tolerance:
            base, outcome = base + move, SolveOutcome.CONVERGED
            break
        for _ in range(_HALVINGS):
            score, information = _sums(
                base + move, data, weight, attenuation, dead, bias_correction
            )
            if score @ move >= -slope:
                break
            move, slope = 0.5 * move, 0.5 * slope
        base = base + move
    return _finish(base, data, weight, attenuation, dead, steps, outcome)


def _check(counts: Array, weight: Array, attenuation: Array) -> None:
    """Refuse arrays that do not fit together."""
    if counts.ndim != 2 or weight.ndim != 3 or attenuation.ndim != 2:
        msg = (
            "counts must be (sample, bin), weight (sample or 1, bin, node) and "
            f"attenuation (node, material), got shapes {counts.shape}, "
            f"{weight.shape} and {attenuation.shape}"
        )
        raise InputError(msg)
    wanted = (counts.shape[1], attenuation.shape[0])
    if weight.shape[1:] != wanted or weight.shape[0] not in {1, len(counts)}:
        msg = f"weight must be (1 or {len(counts)}, *{wanted}), got {weight.shape}"
        raise InputError(msg)


def _pooled_start(counts: Array, weight: Array, attenuation: Array) -> Array:
    """Fit of the summed counts to the summed weights, or no object at all."""
    share = len(counts) if len(weight) == 1 else 1
    pooled = share * weight.sum(axis=0, keepdims=True)
    total, zero = counts.sum(axis=0, keepdims=True), np.zeros(attenuation.shape[1])
    found = solve(total, pooled, attenuation, start=zero)
    return np.asarray(np.nan_to_num(found.areal_density[0]))


def _sums(
    a: Array,
    counts: Array,
    weight: Array,
    attenuation: Array,
    dead: Array,
    corrected: bool,
) -> tuple[Array, Array]:
    """Summed score and information; NaN where an expectation cannot be."""
    materials = len(a)
    information, score = np.zeros((materials, materials)), np.zeros(materials)
    bend = np.zeros((materials, materials * materials))
    for first in range(0, len(counts), _SAMPLES_AT_ONCE):
        part = slice(first, first + _SAMPLES_AT_ONCE)
        w = weight[part] if len(weight) > 1 else weight
        expected = expected_counts(a, w, attenuation)
        c = dead[part]
        if not ((expected > 0.0).all() and (c * expected.sum(axis=-1) < 1.0).all()):
            return np.full(materials, np.nan), information
        slope, curve = count_derivatives(a, w, attenuation)
        n = counts[part]
        expected = np.broadcast_to(expected, n.shape)
        slope = np.broadcast_to(slope, (*n.shape, materials))
        curve = curve.reshape(*curve.shape[:2], materials * materials)
        curve = np.broadcast_to(curve, (*n.shape, curve.shape[2]))
        residual = (n - expected)[..., None]
        information += inverse_covariance_product(slope, slope, expected, c).sum(axis=0)
        pulled = inverse_covariance_product(slope, residual, expected, c)
        score += pulled.sum(axis=0)[:, 0]
        if corrected:
            bend += inverse_covariance_product(slope, curve, expected, c).sum(axis=0)
    inverse = _invert(information) if corrected else None
    if inverse is not None:
        score += 0.5 * bend @ inverse.ravel()
    return score, information


def _invert(information: Array) -> Array | None:
    """Inverse, or None if the samples do not tell the materials apart."""
    scale = np.sqrt(np.diag(information))
    if not (np.isfinite(scale).all() and (scale > 0.0).all()):
        return None
    unit = information / np.outer(scale, scale)
    if np.linalg.eigvalsh(unit)[0] < 1e-13:
        return None
    inverse: Array = np.linalg.inv(unit) / np.outer(scale, scale)
    return inverse


def _without_estimate(
    materials: int, samples: int, steps: int, outcome: SolveOutcome
) -> JointEstimate:
    """Result that says why there is none."""
    return JointEstimate(
        areal_density=np.full(materials, np.nan),
        covariance=np.full((materials, materials), np.nan),
        deviance=float("nan"),
        samples=samples,
        steps=steps,
        outcome=outcome,
    )


def _finish(
    a: Array,
    counts: Array,
    weight: Array,
    attenuation: Array,
    dead: Array,
    steps: int,
    outcome: SolveOutcome,
) -> JointEstimate:
    """Result at the estimate."""
    information = _sums(a, counts, weight, attenuation, dead, False)[1]
    covariance = _invert(information)
    if covariance is None:
        return _without_estimate(len(a), len(counts), steps, SolveOutcome.SINGULAR)
    expected = np.broadcast_to(expected_counts(a, weight, attenuation), counts.shape)
    freedom = max(counts.size - len(a), 1)
    if np.count_nonzero(counts.sum(axis=0)) < len(a):
        outcome = SolveOutcome.FEW_COUNTS
    return JointEstimate(
        areal_density=a,
        covariance=covariance,
        deviance=float(deviance(counts, expected, dead=dead).sum() / freedom),
        samples=len(counts),
        steps=steps,
        outcome=outcome,
    )
