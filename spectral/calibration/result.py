"""A calibration: everything that a decomposition needs, and how good it is."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.node_response import NodeTables, node_tables
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    departure_names,
)
from spectral.kernels.node_weights import node_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.residual import ResidualCorrection
    from spectral.forward.counting_model import CountingModel
    from spectral.scans.scan import Layer


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepTable:
    """The exposures that taught the calibration, and how well they are met.

    Attributes
    ----------
    exposure : array of int64, shape (exposure,)
        Index in the scan.
    areal_density : array, shape (exposure, material), in g/cm2
    current_ma, count_time_s : arrays, shape (exposure,)
    drift : array, shape (exposure,)
        Output of the tube, minus 1, as found.
    residual : array, shape (exposure, bin)
        Mean counts over expected, minus 1, all corrections applied.
    physics_residual : array, shape (exposure, bin)
        The same before the smooth correction.
    error : array, shape (exposure, bin)
        Statistical standard deviation of a mean bin.
    """

    exposure: NDArray[np.int64]
    areal_density: NDArray[np.float64]
    current_ma: NDArray[np.float64]
    count_time_s: NDArray[np.float64]
    drift: NDArray[np.float64]
    residual: NDArray[np.float64]
    physics_residual: NDArray[np.float64]
    error: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Promise:
    """What the calibration expects of itself, by leaving steps out.

    Attributes
    ----------
    exposure : array of int64, shape (step,)
        Wedge exposures of the scan that were left out in turn.
    bias : array, shape (step, material), in g/cm2
        Mean decomposed minus true areal density of the left-out step.
    single_error : array, shape (step, material), in g/cm2
        Standard error of one pixel in one such exposure.
    fixed_pattern : array, shape (material,)
        Expected spread between pixels that repeats do not remove, over the
        single-exposure error; median over objects half-way from the steps to their
        middle, without what the open exposures of an object scan add.
    """

    exposure: NDArray[np.int64]
    bias: NDArray[np.float64]
    single_error: NDArray[np.float64]
    fixed_pattern: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Calibration:
    """Responses of all pixels of one detector at one tube setting.

    (y, x) pixels, K thresholds, m materials, q departures a pixel.

    Attributes
    ----------
    materials : tuple of Layer, length m
    thresholds_kev, levels_kev : arrays, shape (K,), in keV
        Nominal settings, and what they mean for the average pixel.
    model : CountingModel
        The average pixel.
    photons_per_mas : float
        Photons of the open beam upon a pixel per mA s.
    residual : ResidualCorrection
    departures : array, shape (y, x, q)
        Of each pixel from the average one (`departure_names`); 0 if bad.
    departure_covariance : array of float32, shape (y, x, q, q)
    spread : array, shape (q, q)
        Covariance of the departures between pixels.
    pixel_reasons : array of uint16, shape (y, x)
        0 = good; else why not (`spectral.scans.bad_pixels`).
    deviance : array of float32, shape (y, x)
        Deviance per degree of freedom of each pixel's fit; NaN if bad.
    steps : StepTable
    promise : Promise or None
    unknowns, unknown_errors : dict of str to float
        Tube and sensor unknowns as fitted.
    voltage_kv, sensor, filters : nominal facts, for the record
    assumptions : tuple of str
    findings : tuple of str
        What was noticed in the scan, in sentences.
    scan_source, scan_digest, created, version, cross_sections : str
    """

    materials: tuple[Layer, ...]
    thresholds_kev: NDArray[np.float64]
    levels_kev: NDArray[np.float64]
    model: CountingModel
    photons_per_mas: float
    residual: ResidualCorrection
    departures: NDArray[np.float64]
    departure_covariance: NDArray[np.float32]
    spread: NDArray[np.float64]
    pixel_reasons: NDArray[np.uint16]
    deviance: NDArray[np.float32]
    steps: StepTable
    promise: Promise | None
    unknowns: dict[str, float]
    unknown_errors: dict[str, float]
    voltage_kv: float
    sensor: str
    filters: tuple[str, ...]
    assumptions: tuple[str, ...]
    findings: tuple[str, ...]
    scan_source: str
    scan_digest: str
    created: str
    version: str
    cross_sections: str
    digest: str = ""

    @property
    def shape(self) -> tuple[int, int]:
        """(row, column)."""
        y, x = self.pixel_reasons.shape
        return y, x

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Names of the departures, in order."""
        return departure_names(self.thresholds_kev.size)

    @property
    def good(self) -> NDArray[np.bool_]:
        """True for pixels that may be used, shape (row, column)."""
        return np.asarray(self.pixel_reasons == 0)

    @property
    def largest(self) -> NDArray[np.float64]:
        """Thickest stack of each material, shape (material,), in g/cm2."""
        return np.asarray(self.steps.areal_density.max(axis=0))

    @property
    def largest_current_ma(self) -> float:
        """Largest tube current of the wedge scan, in mA."""
        return float(self.steps.current_ma.max())

    @property
    def dead_time_ns(self) -> float:
        """Effective dead time of the average pixel, in ns."""
        return self.model.shape.effective_ns

    def threshold_kev(self) -> NDArray[np.float64]:
        """True threshold of every pixel, shape (threshold, row, column), in keV."""
        shift = self.departures[..., 1:-2]
        return np.moveaxis(self.levels_kev + shift, -1, 0)

    def pixels(self, flat: NDArray[np.int64]) -> PixelDepartures:
        """Departures of pixels by flat index."""
        return PixelDepartures(
            values=self.departures.reshape(-1, self.departures.shape[-1])[flat]
        )

    def average_pixel(self) -> PixelDepartures:
        """Departures of the average pixel: none."""
        return PixelDepartures(values=np.zeros((1, self.departures.shape[-1])))

    def expected_bins(
        self,
        areal_density: NDArray[np.float64],
        current_ma: NDArray[np.float64],
        output: NDArray[np.float64],
        flat: NDArray[np.int64],
    ) -> NDArray[np.float64]:
        """Counts per second in each bin, by the full model.

        Parameters
        ----------
        areal_density : array, shape (case, material), in g/cm2
        current_ma, output : arrays, shape (case,)
            Tube current and the tube's relative output at it.
        flat : array of int64, shape (pixel,)
            Flat indices of the pixels.

        Returns
        -------
        array, shape (pixel, case, bin), in 1/s
        """
        rate = self.photons_per_mas * current_ma * output
        tables = curve_tables(self.model, areal_density, rate)
        kinds = [tables.curve, tables.by_rate, tables.by_variance, tables.by_dead_time]
        bins = self.levels_kev.size
        found = np.empty((flat.size, bins, areal_density.shape[0]))
        node_weights(
            np.ascontiguousarray([[kind.T for kind in kinds]] * bins),
            self.levels_kev,
            tables.step_kev,
            self.pixels(flat).values,
            1.0,
            found,
        )
        factor = np.exp(self.residual.log_factor(areal_density, current_ma))
        return np.asarray(found.transpose(0, 2, 1) * factor)

    def nodes(self, current_ma: float, output: float = 1.0) -> NodeTables:
        """Node tables at one tube current and relative output of the tube."""
        return node_tables(
            self.model,
            self.levels_kev,
            self.largest,
            self.photons_per_mas * current_ma * output,
            log_factor=lambda areal: self.residual.log_factor(areal, current_ma),
        )
