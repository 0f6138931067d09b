"""Start values: one quadratic regression shared by all pixels."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.decomposition.likelihood import (
    count_derivatives,
    cramer_rao_bound,
    expected_counts,
    fisher_information,
)
from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

_ROWS_PER_FEATURE = 40
_THICKEST = 0.01  # of the open counts, at which a default domain ends


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StartRegression:
    """Quadratic polynomial in ln((N + 1/2) / open counts) of the bins.

    Attributes
    ----------
    coefficients : array, shape (feature, material), in g/cm2
        Features: 1, each bin's logarithm, products of two (upper triangle by rows).
    lowest, highest : arrays, shape (material,), in g/cm2
        Start values are held within, so that odd counts start from a sane point.
    """

    coefficients: Array
    lowest: Array
    highest: Array

    @classmethod
    def fit(
        cls,
        weight: Array,
        attenuation: Array,
        domain_points: Array | None = None,
        *,
        seed: int = 20,
    ) -> StartRegression:
        """Regression learned from noisy counts of the population's weights.

        Parameters
        ----------
        weight : array, shape (bin, node) or (pixel, bin, node), in counts
            Of several pixels the mean is taken: the polynomial sees ratios only.
        attenuation : array, shape (node, material), in cm2/g
        domain_points : array, shape (point, material), in g/cm2, optional
            Where start values are wanted; default: down to 1 % of the open counts.
        seed : int
            Of the counting noise that teaches how little a single pixel tells.

        Returns
        -------
        StartRegression

        Raises
        ------
        InputError
            If fewer points than materials + 1 have positive expected counts.

        Notes
        -----
        Rows are weighted by 1 / (standard error + 1 % of the domain), material by
        material, so that the start is within about one standard error everywhere.
        """
        mean = weight.mean(axis=0) if weight.ndim == 3 else weight
        mean = np.asarray(mean, np.float64)
        if domain_points is None:
            domain_points = default_domain(mean, attenuation)
        expected = expected_counts(domain_points, mean, attenuation)
        lit = (expected > 0.0).all(axis=-1)
        points, expected = domain_points[lit], expected[lit]
        if len(points) <= attenuation.shape[1]:
            msg = (
                f"only {len(points)} of {len(domain_points)} domain_points have "
                f"positive expected counts: check the weights"
            )
            raise InputError(msg)
        span = np.ptp(points, axis=0)
        error = _standard_errors(points, expected, mean, attenuation, span)
        bins = len(mean)
        features = 1 + bins + bins * (bins + 1) // 2
        copies = -(-_ROWS_PER_FEATURE * features // len(points))
        rng = np.random.default_rng(seed)
        noisy = rng.poisson(np.minimum(np.tile(expected, (copies, 1)), 1e15))
        rows = _features(noisy.astype(np.float64), mean.sum(axis=-1))
        wanted, share = np.tile(points, (copies, 1)), np.tile(1.0 / error, (copies, 1))
        coefficients = np.empty((features, points.shape[1]))
        for j in range(points.shape[1]):
            scaled = rows * share[:, j : j + 1]
            found = np.linalg.lstsq(scaled, wanted[:, j] * share[:, j], rcond=1e-12)
            coefficients[:, j] = found[0]
        return cls(
            coefficients=coefficients,
            lowest=points.min(axis=0) - span,
            highest=points.max(axis=0) + span,
        )

    def predict(self, counts: Array, weight: Array) -> Array:
        """Start values of some pixels.

        Parameters
        ----------
        counts : array, shape (pixel, bin), in counts
        weight : array, shape (pixel or 1, bin, node), in counts

        Returns
        -------
        array, shape (pixel, material), in g/cm2
        """
        a = _features(counts, weight.sum(axis=-1)) @ self.coefficients
        return np.clip(a, self.lowest, self.highest)


def default_domain(weight: Array, attenuation: Array) -> Array:
    """Mixtures of the materials that leave 1 % or more of the open counts.

    Parameters
    ----------
    weight : array, shape (bin, node), in counts
    attenuation : array, shape (node, material), in cm2/g

    Returns
    -------
    array, shape (point, material), in g/cm2
        Slightly negative mixtures included.

    Raises
    ------
    InputError
        If a material attenuates nothing.
    """
    materials = attenuation.shape[1]
    if not np.all(attenuation.max(axis=0) > 0.0):
        msg = "attenuation must be positive for some node of each material"
        raise InputError(msg)
    full = weight.sum()
    thickest = np.empty(materials)
    for j in range(materials):
        trial = np.zeros((200, materials))
        trial[:, j] = np.geomspace(1e-3, 1e3, 200) / attenuation[:, j].mean()
        left = expected_counts(trial, weight, attenuation)
        bright = (left > 0.0).all(axis=-1) & (left.sum(axis=-1) > _THICKEST * full)
        thickest[j] = trial[max(int(np.argmin(bright)) - 1, 0), j]
    parts = np.array(
        [p for p in itertools.product(range(5), repeat=materials) if sum(p) == 4]
    )
    mixed = parts[:, None, :] / 4.0 * np.linspace(-0.04, 1.0, 14)[:, None]
    return np.asarray(mixed.reshape(-1, materials) * thickest)


def _features(counts: Array, opened: Array) -> Array:
    """Polynomial features, shape (pixel, feature)."""
    x = np.log(np.clip((counts + 0.5) / opened, 1e-30, 1e30))
    row, column = np.triu_indices(x.shape[-1])
    return np.hstack((np.ones((len(x), 1)), x, x[:, row] * x[:, column]))


def _standard_errors(
    points: Array, expected: Array, weight: Array, attenuation: Array, span: Array
) -> Array:
    """Standard error at each point plus a floor, the domain at most."""
    floor = 0.01 * np.where(span > 0.0, span, 1.0)
    derivative = count_derivatives(points, weight, attenuation)[0]
    information = fisher_information(expected, derivative)
    information += np.diag((0.01 / floor) ** 2)  # no error is above the domain
    return np.asarray(
        np.sqrt(np.einsum("...jj->...j", cramer_rao_bound(information))) + floor
    )
