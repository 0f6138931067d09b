"""What all pixels together say of a landmark's curve, as each pixel's prior."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.threshold_scan.landmark_curve import (
    FIRST_TERM,
    LN_WIDTH,
    POWERS,
)
from spectral.calibration.threshold_scan.landmark_fit import CurvePrior
from spectral.calibration.threshold_scan.landmarks import EDGE, END, LINE

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.threshold_scan.landmark_curve import CurveTable
    from spectral.calibration.threshold_scan.landmark_fit import CurveFit

CLOUD_SPREAD = {LINE: 0.7, EDGE: 0.1, END: 0.1}
"""ln of the clouds' variance: of a line known to a factor of two before the data speak;
edges and ends show it badly and take it from the lines."""
CONTRAST_SPREAD = 0.05
POWER_SPREAD = {LINE: (0.3, 0.03), EDGE: (0.3, 0.03), END: (0.05, 0.003)}
"""Constant, and slope per keV, as shares of the counts below the landmark."""
LN_WIDTH_SPREAD = {LINE: 0.7, EDGE: 0.2, END: 0.1}
PIXEL_CLOUD_SPREAD = 0.02
"""The clouds belong to the sensor and its bias: pixels differ by this at most."""
KNOWN_CLOUD_SPREAD = 0.15
"""ln of the clouds' variance, when another line has taught it."""
PIXEL_SHARE = 0.15
"""Where pixels cannot teach it, terms differ between them by this share of what was
free at first."""
SPREAD_FLOOR = {LINE: 0.03, EDGE: 0.1, END: 0.1}
"""Least spread between pixels, as a share of what was free at first."""
EM_ROUNDS = 60


def free_prior(
    table: CurveTable, noise_kev: float, *, cloud_known: bool = False
) -> CurvePrior:
    """What is known of a curve before any fit; the cloud perhaps from other lines."""
    order = table.landmark.order
    mean = np.zeros(table.parameters)
    mean[LN_WIDTH] = np.log(noise_kev)
    spread = np.full(table.parameters, np.inf)
    spread[LN_WIDTH] = LN_WIDTH_SPREAD[order]
    spread[FIRST_TERM] = CLOUD_SPREAD[order]
    if cloud_known:
        spread[FIRST_TERM] = min(KNOWN_CLOUD_SPREAD, CLOUD_SPREAD[order])
    spread[FIRST_TERM + 1 : -POWERS] = CONTRAST_SPREAD
    spread[-POWERS:] = POWER_SPREAD[order]
    return CurvePrior(mean=mean, spread=spread)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SharedTerms:
    """Terms that pixels share but for a little: ln width, cloud, contrast, powers.

    Attributes
    ----------
    mean, spread : arrays, shape (term,)
        Over the pixels.
    covariance : array, shape (term, term)
        Of the mean.
    """

    mean: NDArray[np.float64]
    spread: NDArray[np.float64]
    covariance: NDArray[np.float64]


def shared_places(table: CurveTable) -> NDArray[np.int64]:
    """Places of the shared terms among the curve's parameters."""
    return np.array([LN_WIDTH, *range(FIRST_TERM, table.parameters)])


def pooled_terms(
    table: CurveTable, fit: CurveFit, prior: CurvePrior, before: CurvePrior
) -> SharedTerms:
    """Mean and spread of the terms that make all pixels' counts most probable.

    Parameters
    ----------
    table : CurveTable
    fit : CurveFit
    prior : CurvePrior
        Of that fit; one mean for all pixels.
    before : CurvePrior
        What is known of the mean itself before these counts.

    Notes
    -----
    Each pixel's likelihood is taken as normal about its fit, with information
    H = C^-1 - P and pull H m = C^-1 m_fit - P m_0 and the other parameters integrated
    out. The mean is the generalised least-squares one; the spread follows by
    expectation maximisation. Pixels that fit badly or are unusually wide do not take
    part. Source: A. P. Dempster, N. M. Laird, D. B. Rubin, J. R. Stat. Soc. B 39
    (1977) 1; N. M. Laird, J. H. Ware, Biometrics 38 (1982) 963.
    """
    which = shared_places(table)
    sound = _sound(fit)
    inverse = np.linalg.inv(fit.covariance[sound][:, which[:, None], which])
    precision = np.diag(1.0 / prior.spread[which] ** 2)
    values = fit.values[sound][:, which]
    information = inverse - precision
    pull = np.matmul(inverse, values[..., None])[..., 0] - precision @ prior.mean[which]
    floor = SPREAD_FLOOR[table.landmark.order] * prior.spread[which]
    known = np.diag(1.0 / before.spread[which] ** 2)
    spread = PIXEL_SHARE * prior.spread[which]
    spread[1] = PIXEL_CLOUD_SPREAD
    mean = covariance = np.empty(0)
    for _ in range(EM_ROUNDS):
        own = np.diag(1.0 / spread**2)
        each = np.linalg.inv(information + own)
        weighed = own @ each
        total = (own - weighed @ own).sum(axis=0) + known
        covariance = np.linalg.inv(total)
        score = np.matmul(weighed, pull[..., None])[..., 0].sum(axis=0)
        mean = covariance @ (score + known @ before.mean[which])
        at = np.matmul(each, (pull + own @ mean)[..., None])[..., 0]
        variance = (at - mean) ** 2 + np.einsum("pii->pi", each)
        spread = np.maximum(np.sqrt(variance.mean(axis=0)), floor)
        spread[1] = PIXEL_CLOUD_SPREAD
    return SharedTerms(mean=mean, spread=spread, covariance=covariance)


def _sound(fit: CurveFit) -> NDArray[np.bool_]:
    """Fits that may teach: converged, no unusual deviance, no unusual width."""
    ratio = fit.deviance / fit.freedom
    width = fit.values[:, LN_WIDTH]
    sound = fit.converged.copy()
    for values in (ratio, width):
        middle = np.median(values)
        sound &= np.abs(values - middle) <= 6.0 * np.median(np.abs(values - middle))
    return sound if sound.any() else np.ones_like(sound)


def learned_prior(
    table: CurveTable, shared: SharedTerms, free: CurvePrior
) -> CurvePrior:
    """Prior of single pixels about what they share."""
    which = shared_places(table)
    mean, spread = np.zeros(table.parameters), free.spread.copy()
    mean[which] = shared.mean
    spread[which] = shared.spread
    return CurvePrior(mean=mean, spread=spread)
