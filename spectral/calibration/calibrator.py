"""From a wedge scan to a calibration, in the order that the physics asks."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import TYPE_CHECKING

import numpy as np

import spectral
from spectral.calibration.pixel_fit import PixelFit, fit_pixels
from spectral.calibration.population import Population, fit_population
from spectral.calibration.promise import with_promise
from spectral.calibration.residual import ResidualCorrection, fit_residual
from spectral.calibration.result import Calibration, StepTable
from spectral.calibration.wedge_data import WedgeData, wedge_data
from spectral.errors import CalibrationError
from spectral.forward.pixel_response import curve_tables
from spectral.forward.setup import Setup
from spectral.physics.cross_sections import table_source
from spectral.scans.bad_pixels import PixelReason, find_bad_pixels

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

FIRST_SPREAD_KEV = 1.5
MISFIT_SIGMAS = 6.0


class WedgeCalibrator:
    """Learns every pixel's bin response from one step-wedge scan.

    Parameters
    ----------
    rounds : int
        Gauss-Newton rounds of the population fit.
    samples : int
        Sampled interactions per energy and channel of the sensor model.
    excluded : tuple of int
        Exposures of the scan to leave out.
    leave_out : bool
        Also work out the promise by leaving steps out.

    Attributes
    ----------
    calibration_ : Calibration
        After `fit`.

    Notes
    -----
    Follows scikit-learn's conventions for an estimator.
    """

    def __init__(
        self,
        *,
        rounds: int = 12,
        samples: int = 1024,
        excluded: tuple[int, ...] = (),
        leave_out: bool = True,
    ) -> None:
        self.rounds = rounds
        self.samples = samples
        self.excluded = excluded
        self.leave_out = leave_out

    def fit(
        self, scan: Scan, *, progress: Callable[[str, float], None] | None = None
    ) -> WedgeCalibrator:
        """Fit to a wedge scan.

        Parameters
        ----------
        scan : Scan
        progress : callable, optional
            Called with the name of the stage and its finished share.

        Raises
        ------
        ScanError
            If the scan does not say what the forward model must know.
        CalibrationError
            If the data do not determine the calibration.
        """

        def tell(stage: str) -> Callable[[float], None]:
            def inner(share: float) -> None:
                if progress is not None:
                    progress(stage, share)

            return inner

        setup = Setup.from_scan(scan)
        reasons = find_bad_pixels(scan)
        data = wedge_data(scan, reasons != 0, excluded=self.excluded)
        spread = np.full(data.thresholds_kev.size, FIRST_SPREAD_KEV)
        population = fit_population(
            data,
            setup,
            spread_kev=spread,
            rounds=self.rounds,
            samples=self.samples,
            progress=tell("average pixel"),
        )
        fit = self._pixels(data, population, tell("first look at each pixel"), rounds=2)
        spread = np.sqrt(np.diag(fit.spread))[1:-2]
        population = fit_population(
            data,
            setup,
            spread_kev=spread,
            start=population.values,
            rounds=4,
            samples=self.samples,
            progress=tell("average pixel, again"),
        )
        fit = self._pixels(data, population, tell("each pixel"), rounds=4)
        sick = misfits(fit, data)
        if sick.any():
            reasons.reshape(-1)[data.pixel[sick]] |= np.uint16(PixelReason.MISFIT)
        calibration = _assemble(scan, setup, data, population, fit, reasons, sick)
        if self.leave_out:
            calibration = with_promise(calibration)
        self.calibration_ = calibration
        return self

    @staticmethod
    def _pixels(
        data: WedgeData,
        population: Population,
        progress: Callable[[float], None],
        *,
        rounds: int,
    ) -> PixelFit:
        rate = population.photons_per_mas * data.current_ma * (1.0 + population.drift)
        tables = curve_tables(population.model, data.areal_density, rate)
        return fit_pixels(
            data,
            tables,
            data.thresholds_kev + population.shift_kev,
            dead_time_ns=population.model.shape.effective_ns,
            rounds=rounds,
            progress=progress,
        )


def misfits(fit: PixelFit, data: WedgeData) -> NDArray[np.bool_]:
    """Pixels whose own fit is too poor for counting statistics, shape (pixel,).

    The limit is robust: median + MISFIT_SIGMAS standard deviations of the deviance,
    the latter never below what counting statistics alone gives.
    """
    middle = float(np.median(fit.deviance))
    wide = 1.4826 * float(np.median(np.abs(fit.deviance - middle)))
    freedom = data.above.shape[1] * data.above.shape[2]
    wide = max(wide, float(np.sqrt(2.0 / freedom)))
    return np.asarray(fit.deviance > middle + MISFIT_SIGMAS * wide)


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


def _assemble(
    scan: Scan,
    setup: Setup,
    data: WedgeData,
    population: Population,
    fit: PixelFit,
    reasons: NDArray[np.uint16],
    sick: NDArray[np.bool_],
) -> Calibration:
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
