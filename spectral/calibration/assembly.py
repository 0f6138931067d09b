"""Putting the parts of a calibration together."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import TYPE_CHECKING

import numpy as np

import spectral
from spectral.calibration.residual import ResidualCorrection, fit_residual
from spectral.calibration.result import Calibration, StepTable
from spectral.errors import CalibrationError
from spectral.physics.cross_sections import table_source

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.pixel_fit import PixelFit
    from spectral.calibration.population import Population
    from spectral.calibration.wedge_data import WedgeData
    from spectral.forward.setup import Setup
    from spectral.scans.scan import Scan


def _smooth(
    data: WedgeData, population: Population, fit: PixelFit
) -> tuple[ResidualCorrection, NDArray[np.float64], NDArray[np.float64]]:
    """Residual correction, the ratio it was fitted to, and the latter's error."""
    attenuation = population.model.attenuation
    middle = population.model.transmitted(0.5 * data.areal_density.max(axis=0)[None])[0]
    decay = attenuation @ (middle / middle.sum())
    total = np.maximum(data.bins.sum(axis=0), 1.0)
    if not np.all(np.isfinite(fit.ratio)) or np.any(fit.ratio <= 0.0):
        msg = "a wedge exposure holds no counts in one of the bins of any pixel"
        raise CalibrationError(msg)
    ratio = np.log(fit.ratio) + np.log1p(population.drift)[:, None]
    error = 1.0 / np.sqrt(total)
    residual = fit_residual(ratio, error, data.areal_density, data.current_ma, decay)
    return residual, ratio, error


def assemble(
    scan: Scan,
    setup: Setup,
    data: WedgeData,
    population: Population,
    fit: PixelFit,
    reasons: NDArray[np.uint16],
    sick: NDArray[np.bool_],
) -> Calibration:
    """A calibration from the average pixel and every pixel's departures.

    Parameters
    ----------
    scan : Scan
    setup : Setup
    data : WedgeData
    population : Population
    fit : PixelFit
    reasons : array of uint16, shape (row, column)
        Why pixels are unfit, those that misfit included.
    sick : array of bool, shape (pixel,)
        Pixels of ``data`` whose own fit is too poor.
    """
    residual, ratio, error = _smooth(data, population, fit)
    smooth = residual.log_factor(data.areal_density, data.current_ma)
    size = fit.values.shape[1]
    y, x = data.shape
    departures = np.zeros((y * x, size))
    covariance = np.zeros((y * x, size, size), np.float32)
    deviance = np.full(y * x, np.nan, np.float32)
    departures[data.pixel] = fit.values
    covariance[data.pixel] = fit.covariance
    deviance[data.pixel] = fit.deviance
    departures[data.pixel[sick]] = 0.0
    return Calibration(
        materials=scan.materials,
        thresholds_kev=scan.thresholds_kev,
        levels_kev=data.thresholds_kev + population.shift_kev,
        model=population.model,
        photons_per_mas=population.photons_per_mas,
        residual=residual,
        departures=departures.reshape(y, x, size),
        departure_covariance=covariance.reshape(y, x, size, size),
        spread=fit.spread,
        pixel_reasons=reasons,
        deviance=deviance.reshape(y, x),
        steps=StepTable(
            exposure=data.exposure,
            areal_density=data.areal_density,
            current_ma=data.current_ma,
            count_time_s=data.count_time_s,
            drift=residual.drift,
            residual=np.expm1(ratio - smooth - residual.drift[:, None]),
            physics_residual=np.expm1(ratio - residual.drift[:, None]),
            error=error,
        ),
        promise=None,
        unknowns=population.values,
        unknown_errors=population.errors,
        voltage_kv=setup.voltage_kv,
        sensor=(
            f"{setup.sensor.material}, {setup.sensor.thickness_um / 1e3:g} mm, "
            f"{setup.sensor.pitch_um:g} um pixels"
        ),
        filters=tuple(f"{f.material} {f.thickness_mm:g} mm" for f in scan.filters),
        assumptions=setup.assumptions,
        findings=(),
        scan_source=scan.source,
        scan_digest=scan.digest,
        created=datetime.now(UTC).isoformat(timespec="seconds"),
        version=spectral.__version__,
        cross_sections=table_source(),
    )
