"""How one pixel departs from the average pixel, and what that does to its counts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.counting_model import cubic_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.forward.counting_model import CountingModel

RATE_STEP = 0.05


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CurveTables:
    """Counting curves of the average pixel and how they move; per second.

    All arrays have shape (case, grid). A pixel of relative area g, thresholds moved
    by d, noise variance larger by v and dead time larger by the factor exp(t) counts

        g * [curve + ln(g) * by_rate + v * by_variance + t * by_dead_time](U + d).

    Attributes
    ----------
    curve : counts per second above each level
    by_rate : change of curve / rate per unit of ln(rate): pile-up
    by_variance : change per keV2 of noise variance, half the second derivative
    by_dead_time : change per unit of ln(dead time)
    step_kev : float
    """

    curve: NDArray[np.float64]
    by_rate: NDArray[np.float64]
    by_variance: NDArray[np.float64]
    by_dead_time: NDArray[np.float64]
    step_kev: float

    def scaled(self, factor: NDArray[np.float64]) -> CurveTables:
        """The tables with every case multiplied by its factor, shape (case,)."""
        f = factor[:, None]
        return CurveTables(
            curve=self.curve * f,
            by_rate=self.by_rate * f,
            by_variance=self.by_variance * f,
            by_dead_time=self.by_dead_time * f,
            step_kev=self.step_kev,
        )


def curve_tables(
    model: CountingModel,
    areal_density: NDArray[np.float64],
    photon_rate: NDArray[np.float64] | float,
) -> CurveTables:
    """Counting curves and their changes at given objects and rates.

    Parameters
    ----------
    model : CountingModel
    areal_density : array, shape (case, material), in g/cm2
    photon_rate : float or array, shape (case,), in 1/s

    Notes
    -----
    Changes are central differences; the change with noise is the heat equation:
    normal noise of variance v smooths R(U) by exp(v/2 d2/dU2).
    """
    rate = np.broadcast_to(np.asarray(photon_rate, float), areal_density.shape[:1])
    curve = model.counting_curves(areal_density, rate)
    up = model.counting_curves(areal_density, rate * np.exp(RATE_STEP))
    down = model.counting_curves(areal_density, rate * np.exp(-RATE_STEP))
    by_rate = (up * np.exp(-RATE_STEP) - down * np.exp(RATE_STEP)) / (2.0 * RATE_STEP)
    slower = model.with_dead_time(np.exp(RATE_STEP))
    faster = model.with_dead_time(np.exp(-RATE_STEP))
    by_dead_time = (
        slower.counting_curves(areal_density, rate)
        - faster.counting_curves(areal_density, rate)
    ) / (2.0 * RATE_STEP)
    second = np.zeros_like(curve)
    second[:, 1:-1] = curve[:, 2:] - 2.0 * curve[:, 1:-1] + curve[:, :-2]
    return CurveTables(
        curve=curve,
        by_rate=by_rate,
        by_variance=0.5 * second / model.step_kev**2,
        by_dead_time=by_dead_time,
        step_kev=model.step_kev,
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PixelDepartures:
    """Departures of pixels from the average one, in a fixed order.

    Attributes
    ----------
    values : array, shape (pixel, parameter)
        ln area, threshold shifts in keV (one a threshold), noise variance in keV2,
        ln dead time.
    """

    values: NDArray[np.float64]

    @property
    def thresholds(self) -> int:
        """Number of thresholds."""
        return int(self.values.shape[1]) - 3

    @property
    def ln_area(self) -> NDArray[np.float64]:
        """Shape (pixel,)."""
        return self.values[:, 0]

    @property
    def shift_kev(self) -> NDArray[np.float64]:
        """Shape (pixel, threshold), in keV."""
        return self.values[:, 1:-2]

    @property
    def variance_kev2(self) -> NDArray[np.float64]:
        """Shape (pixel,), in keV2."""
        return self.values[:, -2]

    @property
    def ln_dead_time(self) -> NDArray[np.float64]:
        """Shape (pixel,)."""
        return self.values[:, -1]

    def brightened(self, output: float) -> PixelDepartures:
        """The same pixels in a beam ``output`` times as strong."""
        values = self.values.copy()
        values[:, 0] += np.log(output)
        return PixelDepartures(values=values)


def departure_names(thresholds: int) -> tuple[str, ...]:
    """Names of the parameters of `PixelDepartures`, in order."""
    return (
        "ln_area",
        *(f"shift_{k + 1}_kev" for k in range(thresholds)),
        "variance_kev2",
        "ln_dead_time",
    )


def read_pixels(
    tables: CurveTables,
    levels_kev: NDArray[np.float64],
    pixels: PixelDepartures,
    *,
    thresholds: slice = slice(None),
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Curves at each pixel's own thresholds, with derivatives.

    Parameters
    ----------
    tables : CurveTables
        Of shape (case, grid); a case is an exposure, or a node.
    levels_kev : array, shape (threshold,), in keV
        Thresholds of the average pixel.
    pixels : PixelDepartures
    thresholds : slice
        Which thresholds to read.

    Returns
    -------
    above : array, shape (pixel, case, threshold)
    change : array, shape (pixel, case, threshold, 4)
        With ln area, the threshold's own shift, noise variance, ln dead time.
    """
    shift = pixels.shift_kev[:, thresholds]
    first, value, slope = cubic_weights(
        levels_kev[thresholds] + shift, tables.step_kev, tables.curve.shape[1]
    )

    def read(
        curve: NDArray[np.float64], by: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        out = np.zeros((curve.shape[0], *first.shape))
        for q in range(4):
            out += curve[:, first + q] * by[..., q]
        return out.transpose(1, 0, 2)

    area = np.exp(pixels.ln_area)[:, None, None]
    ln_area = pixels.ln_area[:, None, None]
    variance = pixels.variance_kev2[:, None, None]
    ln_dead = pixels.ln_dead_time[:, None, None]
    by_rate = read(tables.by_rate, value)
    by_variance = read(tables.by_variance, value)
    by_dead = read(tables.by_dead_time, value)

    def mixed(by: NDArray[np.float64]) -> NDArray[np.float64]:
        return (
            read(tables.curve, by)
            + ln_area * read(tables.by_rate, by)
            + variance * read(tables.by_variance, by)
            + ln_dead * read(tables.by_dead_time, by)
        )

    above = area * mixed(value)
    change = np.stack(
        [
            above + area * by_rate,
            area * mixed(slope),
            area * by_variance,
            area * by_dead,
        ],
        axis=-1,
    )
    return above, change


def expected_above(
    tables: CurveTables,
    levels_kev: NDArray[np.float64],
    pixels: PixelDepartures,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Counts per second above each threshold of each pixel, with derivatives.

    Arguments as `read_pixels`.

    Returns
    -------
    expected : array, shape (pixel, case, threshold), in 1/s
    derivative : array, shape (pixel, case, threshold, parameter)
        With respect to all departures, in their order.
    """
    above, change = read_pixels(tables, levels_kev, pixels)
    count = levels_kev.size
    derivative = np.zeros((*above.shape, count + 3))
    derivative[..., 0] = change[..., 0]
    for k in range(count):
        derivative[:, :, k, 1 + k] = change[:, :, k, 1]
    derivative[..., -2] = change[..., 2]
    derivative[..., -1] = change[..., 3]
    return above, derivative
