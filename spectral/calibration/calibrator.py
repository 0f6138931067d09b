"""From a wedge scan to a calibration, in the order that the physics asks."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Literal

import numpy as np
from sklearn.base import BaseEstimator

from spectral.calibration.assembly import assemble
from spectral.calibration.pixel_fit import MeasuredShifts, PixelFit, fit_pixels
from spectral.calibration.population import Population, fit_population
from spectral.calibration.promise import with_promise
from spectral.calibration.scan_sentences import told_of
from spectral.calibration.scan_trends import trends
from spectral.calibration.step_faults import (
    LARGEST_SHARE,
    find_step_faults,
    look_at,
    name_faults,
)
from spectral.calibration.wedge_data import WedgeData, wedge_data
from spectral.errors import CalibrationError, InputError
from spectral.forward.pixel_response import curve_tables
from spectral.forward.setup import Setup
from spectral.forward.step_thickness import thickness_faults
from spectral.scans.bad_pixels import PixelReason, find_bad_pixels
from spectral.scans.exposure_levels import exposure_levels
from spectral.scans.exposure_problems import ProblemKind, exposure_problems

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.scans.exposure_problems import ExposureProblem
    from spectral.scans.scan import Scan

Faults = Literal["leave out", "refuse", "keep"]
FIRST_SPREAD_KEV = 1.5
MISFIT_SIGMAS = 6.0
DOUBTFUL = (ProblemKind.LEVEL, ProblemKind.LABEL)
"""What a look at the counts alone may get wrong."""


class WedgeCalibrator(BaseEstimator):  # type: ignore[misc]
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
    faults : {"leave out", "refuse", "keep"}
        What to do with exposures that contradict the others or themselves: leave
        them out and say so, refuse the scan, or do not look.
    threshold_shifts : (shift_kev, sigma_kev), each of shape (row, column, threshold)
        What a threshold scan says of each pixel
        (`spectral.calibration.threshold_scan.result.threshold_prior`).

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
        faults: Faults = "leave out",
        threshold_shifts: tuple[NDArray[np.float64], NDArray[np.float64]] | None = None,
    ) -> None:
        self.rounds = rounds
        self.samples = samples
        self.excluded = excluded
        self.leave_out = leave_out
        self.faults = faults
        self.threshold_shifts = threshold_shifts

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
        InputError
            If an exposure to leave out does not exist.
        """
        setup = Setup.from_scan(scan)
        self._check_excluded(scan)
        reasons = find_bad_pixels(scan)
        suspects = self._suspects(scan, reasons)
        self._refuse_without_opens(scan, suspects)
        self._refuse_wrong_units(scan, suspects)
        self.progress_ = progress
        with told_of(scan):
            self.calibration_ = self._learned(scan, setup, reasons, suspects)
        return self

    def _learned(
        self,
        scan: Scan,
        setup: Setup,
        reasons: NDArray[np.uint16],
        suspects: dict[int, ExposureProblem],
    ) -> Calibration:
        calibration = self._once(scan, setup, reasons, self.excluded + tuple(suspects))
        if self.faults != "keep":
            calibration = self._without_faults(
                scan, setup, reasons, calibration, suspects
            )
        return with_promise(calibration) if self.leave_out else calibration

    def _check_excluded(self, scan: Scan) -> None:
        for exposure in self.excluded:
            if not 0 <= exposure < scan.shape[0]:
                msg = (
                    f"{scan.source}: exposure {exposure} cannot be left out; exposures "
                    f"0 to {scan.shape[0] - 1} exist"
                )
                raise InputError(msg)

    def _refuse_without_opens(
        self, scan: Scan, suspects: dict[int, ExposureProblem]
    ) -> None:
        opens = [i for i in scan.exposures("open").tolist() if i not in self.excluded]
        if opens and all(i in suspects for i in opens):
            msg = (
                f"{scan.source}: every open exposure has a problem of its own, as "
                f"exposure {opens[0]}: {suspects[opens[0]].text}"
            )
            raise CalibrationError(msg)

    def _refuse_wrong_units(
        self, scan: Scan, suspects: dict[int, ExposureProblem]
    ) -> None:
        faults = thickness_faults(scan, without=(*self.excluded, *suspects))
        if faults:
            msg = f"{scan.source}: {faults[0]}"
            raise CalibrationError(msg)

    def _suspects(
        self, scan: Scan, reasons: NDArray[np.uint16]
    ) -> dict[int, ExposureProblem]:
        """Exposures that a check of the counts alone already finds wrong."""
        if self.faults == "keep":
            return {}
        problems = exposure_problems(scan, exposure_levels(scan, reasons == 0))
        used = set(scan.exposures("dark", "open", "wedge").tolist())
        used -= set(self.excluded)
        return {p.exposure: p for p in problems if p.exposure in used}

    def _without_faults(
        self,
        scan: Scan,
        setup: Setup,
        reasons: NDArray[np.uint16],
        calibration: Calibration,
        suspects: dict[int, ExposureProblem],
    ) -> Calibration:
        """The calibration without exposures that contradict the others.

        An exposure whose level alone looked wrong comes back if the model, fitted
        without it, expects just that level: pile-up bends levels, too.
        """
        found = {f.exposure for f in find_step_faults(calibration)}
        left = set(suspects) | found
        if found:
            self._refuse_too_many(scan, left)
            calibration = self._once(
                scan, setup, reasons, self.excluded + tuple(sorted(left))
            )
        named = name_faults(calibration, look_at(calibration, scan, sorted(left)))
        texts = {f.exposure: f.text for f in named}
        cleared = {
            e for e, p in suspects.items() if p.kind in DOUBTFUL and e not in texts
        }
        if cleared:
            left -= cleared
            calibration = self._once(
                scan, setup, reasons, self.excluded + tuple(sorted(left))
            )
        said = {e: f"exposure {e}: {p.text}" for e, p in suspects.items()} | texts
        findings = [
            said.get(e, f"exposure {e}: unlike the others") + "; left out"
            for e in sorted(left)
        ]
        if findings and self.faults == "refuse":
            msg = f"{scan.source}: {findings[0]}".removesuffix("; left out")
            raise CalibrationError(msg)
        return replace(calibration, findings=(*findings, *trends(calibration)))

    @staticmethod
    def _refuse_too_many(scan: Scan, left: set[int]) -> None:
        every = scan.exposures("open", "wedge").size
        if len(left) > LARGEST_SHARE * every:
            listed = ", ".join(map(str, sorted(left)))
            msg = (
                f"{scan.source}: {len(left)} of {every} exposures contradict the rest "
                f"({listed}); check the list of steps"
            )
            raise CalibrationError(msg)

    def _once(
        self,
        scan: Scan,
        setup: Setup,
        reasons: NDArray[np.uint16],
        excluded: tuple[int, ...],
    ) -> Calibration:
        """One calibration from the exposures that are not excluded."""
        reasons = reasons.copy()
        data = wedge_data(scan, reasons != 0, excluded=excluded)
        spread = np.full(data.thresholds_kev.size, FIRST_SPREAD_KEV)
        population = fit_population(
            data,
            setup,
            spread_kev=spread,
            rounds=self.rounds,
            samples=self.samples,
            progress=self._tell("average pixel"),
        )
        fit = self._pixels(data, population, "first look at each pixel", rounds=2)
        spread = np.sqrt(np.diag(fit.spread))[1:-2]
        population = fit_population(
            data,
            setup,
            spread_kev=spread,
            start=population.values,
            rounds=4,
            samples=self.samples,
            progress=self._tell("average pixel, again"),
        )
        fit = self._pixels(data, population, "each pixel", rounds=4)
        sick = misfits(fit, data)
        reasons.reshape(-1)[data.pixel[sick]] |= np.uint16(PixelReason.MISFIT)
        return assemble(scan, setup, data, population, fit, reasons, sick)

    def _tell(self, stage: str) -> Callable[[float], None]:
        progress = self.progress_

        def inner(share: float) -> None:
            if progress is not None:
                progress(stage, share)

        return inner

    def _pixels(
        self, data: WedgeData, population: Population, stage: str, *, rounds: int
    ) -> PixelFit:
        rate = population.photons_per_mas * data.current_ma * (1.0 + population.drift)
        tables = curve_tables(population.model, data.areal_density, rate)
        return fit_pixels(
            data,
            tables,
            data.thresholds_kev + population.shift_kev,
            dead_time_ns=population.model.shape.effective_ns,
            measured=self._measured(data),
            rounds=rounds,
            progress=self._tell(stage),
        )

    def _measured(self, data: WedgeData) -> MeasuredShifts | None:
        """Known shifts of the data's pixels."""
        if self.threshold_shifts is None:
            return None
        wanted = (*data.shape, data.thresholds_kev.size)
        for name, values in zip(("shift", "sigma"), self.threshold_shifts, strict=True):
            if values.shape != wanted:
                msg = (
                    f"the {name} of threshold_shifts has shape {values.shape}, the scan "
                    f"needs {wanted}"
                )
                raise InputError(msg)
        shift, sigma = (
            values.reshape(-1, wanted[2])[data.pixel]
            for values in self.threshold_shifts
        )
        return MeasuredShifts(shift_kev=shift, sigma_kev=sigma)


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
