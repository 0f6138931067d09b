"""From areal densities to counting curves: counts per second against threshold."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.physics.pileup import PulseShape, crossing_rate

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CountingModel:
    """All that an average pixel needs to turn photons into counts.

    Attributes
    ----------
    energy_kev : array, shape (energy,), in keV
    spectrum : array, shape (energy,)
        Shares of the photons of the open beam, adding up to 1.
    attenuation : array, shape (material, energy), in cm2/g
    heights : array, shape (energy, grid)
        Mean pulses of each height per photon (`spectral.physics.sensor`).
    step_kev : float
        Spacing of the pulse-height grid, which starts at 0.
    noise_kev : float
        Electronic noise, standard deviation.
    shape : PulseShape
    """

    energy_kev: NDArray[np.float64]
    spectrum: NDArray[np.float64]
    attenuation: NDArray[np.float64]
    heights: NDArray[np.float64]
    step_kev: float
    noise_kev: float
    shape: PulseShape

    def transmitted(self, areal_density: NDArray[np.float64]) -> NDArray[np.float64]:
        """Photons that pass, shape (case, energy), per photon of the open beam.

        Notes
        -----
        Beer-Lambert law for a narrow beam; scatter into the pixel is left out.
        """
        if areal_density.shape[-1] != self.attenuation.shape[0]:
            msg = (
                f"areal_density has {areal_density.shape[-1]} materials, the model "
                f"has {self.attenuation.shape[0]}"
            )
            raise InputError(msg)
        return np.asarray(self.spectrum * np.exp(-areal_density @ self.attenuation))

    def counting_curves(
        self,
        areal_density: NDArray[np.float64],
        photon_rate: NDArray[np.float64] | float,
    ) -> NDArray[np.float64]:
        """Counts above every level of the pulse-height grid, per second.

        Parameters
        ----------
        areal_density : array, shape (case, material), in g/cm2
        photon_rate : float or array, shape (case,), in 1/s
            Photons of the open beam upon one pixel.

        Returns
        -------
        array, shape (case, grid), in 1/s
        """
        rate = np.broadcast_to(np.asarray(photon_rate, float), areal_density.shape[:1])
        pulses = (self.transmitted(areal_density) @ self.heights) * rate[:, None]
        return crossing_rate(
            pulses,
            self.shape,
            step_kev=self.step_kev,
            noise_kev=self.noise_kev,
            size=_transform_length(self.heights.shape[1]),
        )

    def with_dead_time(self, factor: float) -> CountingModel:
        """The model with all times of the pulse multiplied by ``factor``."""
        return replace(
            self,
            shape=replace(
                self.shape,
                dead_time_ns=self.shape.dead_time_ns * factor,
                tail_ns=self.shape.tail_ns * factor,
            ),
        )


def _transform_length(grid: int) -> int:
    """Power of two that holds a pulse-height grid with room for noise."""
    return int(2 ** np.ceil(np.log2(2.2 * grid)))


def cubic_weights(
    level_kev: NDArray[np.float64], step_kev: float, grid: int
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]:
    """Where and how to read a curve between grid points.

    Parameters
    ----------
    level_kev : array of any shape, in keV
    step_kev : float
    grid : int
        Number of points of the curve.

    Returns
    -------
    first : array of int64, same shape
        First of four neighbouring grid points.
    value, slope : arrays, same shape + (4,)
        Weights of the four points for the value and for its derivative per keV.

    Notes
    -----
    Lagrange's cubic through four points.
    """
    place = np.clip(level_kev / step_kev, 1.0, grid - 2.001)
    first = place.astype(np.int64) - 1
    t = place - first - 1.0
    value = np.stack(
        [
            -t * (t - 1.0) * (t - 2.0) / 6.0,
            (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0,
            -(t + 1.0) * t * (t - 2.0) / 2.0,
            (t + 1.0) * t * (t - 1.0) / 6.0,
        ],
        axis=-1,
    )
    slope = (
        np.stack(
            [
                -(3.0 * t**2 - 6.0 * t + 2.0) / 6.0,
                (3.0 * t**2 - 4.0 * t - 1.0) / 2.0,
                -(3.0 * t**2 - 2.0 * t - 2.0) / 2.0,
                (3.0 * t**2 - 1.0) / 6.0,
            ],
            axis=-1,
        )
        / step_kev
    )
    return first, value, slope


def counts_to_bins(above: NDArray[np.float64], axis: int = -1) -> NDArray[np.float64]:
    """Counts between neighbouring thresholds from counts above each threshold.

    The last bin is what lies above the highest threshold; the shape is kept.
    """
    return -np.diff(above, axis=axis, append=np.zeros_like(np.take(above, [0], axis)))
