"""From an object scan and a calibration to maps with errors and flags."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.decomposition.flags import PixelFlag
from spectral.decomposition.judging import (
    domain_facets,
    judge,
    misfit_limit,
    rate_share,
    sigmas_outside,
)
from spectral.decomposition.maps import Maps
from spectral.decomposition.responses import Responses, calibration_spread, responses
from spectral.decomposition.session import Session, current_of, normalise
from spectral.decomposition.solver import SolveOutcome, solve
from spectral.decomposition.start_values import StartRegression
from spectral.errors import InputError, ScanError
from spectral.forward.counting_model import counts_to_bins
from spectral.scans.bad_pixels import find_bad_pixels
from spectral.scans.counts_faults import count_faults

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.decomposition.solver import Solution
    from spectral.forward.node_response import NodeTables
    from spectral.scans.scan import Scan

THRESHOLD_TOLERANCE_KEV = 0.01
OUTPUT_STEP = 2e-4
TABLE_STEP = 0.05
ENDED_WELL = (SolveOutcome.CONVERGED, SolveOutcome.FEW_COUNTS)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Conditions:
    """What one exposure shares with others: current, output and count time."""

    tables: NodeTables
    output: float
    responses: Responses
    start: StartRegression
    rate_limit: NDArray[np.float64]


class MaterialDecomposer:
    """Maximum-likelihood areal densities of basis materials.

    Parameters
    ----------
    calibration : Calibration
    bias_correction : bool
        Take off the first-order bias of maximum likelihood.
    nonnegative : bool
        Keep areal densities at or above 0; averages of such maps are biased.
    threads : int
        Threads of the solver.

    Attributes
    ----------
    session_ : Session
        After `fit`: the tube's output in the scan.
    usable_ : array of bool, shape (row, column)
        After `fit`: pixels that calibration and scan both call sound.

    Notes
    -----
    Follows scikit-learn's conventions: `fit` reads dark and open exposures,
    `transform` takes bin counts (pixel, bin) to areal densities (pixel, material).
    """

    def __init__(
        self,
        calibration: Calibration,
        *,
        bias_correction: bool = True,
        nonnegative: bool = False,
        threads: int = 2,
    ) -> None:
        self.calibration = calibration
        self.bias_correction = bias_correction
        self.nonnegative = nonnegative
        self.threads = threads
        self._conditions: dict[tuple[float, float, float], Conditions] = {}
        self._nodes: dict[tuple[float, float], NodeTables] = {}

    def fit(self, scan: Scan) -> MaterialDecomposer:
        """Read the session off a scan's dark and open exposures.

        Raises
        ------
        ScanError
            If scan and calibration are not of one detector setting.
        """
        check_match(self.calibration, scan)
        self.bad_ = find_bad_pixels(scan)
        self.usable_ = self.calibration.good & (self.bad_ == 0)
        if not self.usable_.any():
            msg = f"{scan.source}: no pixel is sound in both scan and calibration"
            raise ScanError(msg)
        self.flat_ = np.flatnonzero(self.usable_.ravel())
        self.session_: Session = normalise(self.calibration, scan, self.usable_)
        self.current_ = current_of(scan, self.calibration)
        self.count_time_ = scan.count_time_s
        self._conditions.clear()
        self._nodes.clear()
        return self

    def conditions(self, exposure: int) -> Conditions:
        """Responses at an exposure's current, output and count time."""
        output = self.session_.output[exposure]
        current = float(self.current_[exposure])
        time = float(self.count_time_[exposure])
        step = round(np.log(output) / OUTPUT_STEP)
        key = (current, float(step), time)
        if key not in self._conditions:
            # tables serve a range of outputs; within it pixels count as brighter
            coarse = np.exp(TABLE_STEP * round(np.log(output) / TABLE_STEP))
            fine = float(np.exp(OUTPUT_STEP * step) / coarse)
            tables = self._tables(current, float(coarse))
            ready = responses(
                self.calibration, tables, self.flat_, count_time_s=time, output=fine
            )
            self._conditions[key] = Conditions(
                tables=tables,
                output=fine,
                responses=ready,
                start=start_regression(self.calibration, ready),
                rate_limit=self._rate_limit(time),
            )
        return self._conditions[key]

    def _tables(self, current: float, output: float) -> NodeTables:
        key = (current, output)
        if key not in self._nodes:
            self._nodes[key] = self.calibration.nodes(current, output)
        return self._nodes[key]

    def _rate_limit(self, count_time_s: float) -> NDArray[np.float64]:
        """Counts above the lowest threshold at the highest calibrated rate."""
        nothing = np.zeros((1, self.calibration.largest.size))
        current = np.array([self.calibration.largest_current_ma])
        rate = self.calibration.expected_bins(nothing, current, np.ones(1), self.flat_)
        return np.asarray(rate[:, 0].sum(axis=1) * count_time_s)

    def transform(
        self, counts: NDArray[np.float64], *, exposure: int | None = None
    ) -> NDArray[np.float64]:
        """Areal densities of the usable pixels.

        Parameters
        ----------
        counts : array, shape (pixel, bin)
            Of the pixels in `flat_`, in order.
        exposure : int, optional
            Whose conditions hold; the scan's last exposure by default.

        Returns
        -------
        array, shape (pixel, material), in g/cm2
        """
        if counts.shape != (self.flat_.size, self.calibration.levels_kev.size):
            msg = (
                f"counts has shape {counts.shape}, the fitted pixels need "
                f"{(self.flat_.size, self.calibration.levels_kev.size)}"
            )
            raise InputError(msg)
        which = self.count_time_.size - 1 if exposure is None else exposure
        return self._solve(counts, self.conditions(which)).areal_density

    def _solve(self, counts: NDArray[np.float64], where: Conditions) -> Solution:
        return solve(
            counts,
            where.responses.weight,
            where.responses.attenuation,
            start=where.start,
            dead_fraction=where.responses.lost_fraction,
            bias_correction=self.bias_correction,
            nonnegative=self.nonnegative,
            threads=self.threads,
        )

    def decompose(
        self,
        scan: Scan,
        *,
        exposures: Sequence[int] | None = None,
        progress: Callable[[float], None] | None = None,
    ) -> Maps:
        """Maps of a scan's object exposures.

        Parameters
        ----------
        scan : Scan
        exposures : sequence of int, optional
            Others than those whose role is "object".
        progress : callable, optional
            Called with the finished share.

        Raises
        ------
        ScanError
            If there is nothing to decompose, or scan and calibration do not match.
        """
        self.fit(scan)
        chosen = chosen_exposures(scan, exposures)
        parts = []
        for i, exposure in enumerate(chosen):
            parts.append(self.one(scan, int(exposure)))
            if progress is not None:
                progress((i + 1) / chosen.size)
        return Maps(
            material=tuple(m.name for m in self.calibration.materials),
            exposure=chosen.astype(np.int32),
            areal_density=np.stack([p[0] for p in parts]),
            areal_density_errors=np.stack([p[1] for p in parts]),
            covariance=np.stack([p[2] for p in parts]),
            calibration_errors=np.stack([p[3] for p in parts]),
            deviance=np.stack([p[4] for p in parts]),
            flags=np.stack([p[5] for p in parts]),
            process=self.record(scan),
        )

    def one(self, scan: Scan, exposure: int) -> tuple[NDArray[np.float32], ...]:
        """Maps of one exposure, each without the exposure axis, in `Maps`' order."""
        where = self.conditions(exposure)
        above = scan.counts.read([exposure])
        faults = count_faults(above, count_limit=scan.count_limit)[0]
        shape = above.shape[2:]
        flat = self.flat_
        picked = above[0].reshape(above.shape[1], -1)[:, flat].T.astype(np.float64)
        counts = counts_to_bins(picked)
        found = self._solve(np.maximum(counts, 0.0), where)
        full = unpacked(found.covariance)
        spread, extra = calibration_spread(
            self.calibration,
            where.tables,
            where.responses,
            np.nan_to_num(found.areal_density),
            np.nan_to_num(full),
            count_time_s=float(self.count_time_[exposure]),
            output=where.output,
            threads=self.threads,
        )
        materials = full.shape[1]
        flags = judge(
            total_counts=picked[:, 0],
            outside=sigmas_outside(
                found.areal_density,
                full,
                domain_facets(self.calibration.steps.areal_density),
            ),
            deviance=found.deviance,
            limit=misfit_limit(counts.shape[1] - materials, extra),
            converged=np.isin(found.outcome, ENDED_WELL),
            over_rate=rate_share(picked[:, 0], where.rate_limit),
        )
        flags[faults.ravel()[flat] != 0] |= np.uint16(PixelFlag.COUNT_FAULT)
        lost = ~np.isfinite(found.areal_density).all(axis=1)
        flags[lost & (flags == 0)] |= np.uint16(PixelFlag.NOT_CONVERGED)
        all_flags = np.full(shape, np.uint16(PixelFlag.BAD_PIXEL), np.uint16)
        all_flags.ravel()[flat] = flags

        def onto(values: NDArray[np.float64]) -> NDArray[np.float32]:
            out = np.full((values.shape[1], all_flags.size), np.nan, np.float32)
            out[:, flat] = values.T
            return out.reshape(-1, *shape)

        with np.errstate(invalid="ignore"):
            errors = np.sqrt(np.diagonal(full, axis1=1, axis2=2))
        return (
            onto(found.areal_density),
            onto(errors),
            onto(found.covariance),
            onto(spread),
            onto(found.deviance[:, None])[0],
            all_flags,  # type: ignore[return-value]
        )

    def record(self, scan: Scan) -> dict[str, str]:
        """What belongs in the maps' record of the run."""
        session = self.session_
        calibration = self.calibration
        return {
            "options": json.dumps(
                {
                    "bias_correction": self.bias_correction,
                    "nonnegative": self.nonnegative,
                }
            ),
            "scan": scan.source,
            "scan_digest": scan.digest,
            "calibration_digest": calibration.digest,
            "calibration_of": calibration.scan_source,
            "tube_output": json.dumps(
                {
                    int(e): float(v)
                    for e, v in zip(session.opens, session.open_output, strict=True)
                }
            ),
            "open_counts_over_expected": json.dumps(session.by_bin.tolist()),
            "node_error": json.dumps(
                max(
                    (c.responses.node_error for c in self._conditions.values()),
                    default=0.0,
                )
            ),
            "bins": str(calibration.levels_kev.size),
            "assumed": json.dumps(
                {
                    "voltage_kv": calibration.voltage_kv,
                    "filters": calibration.filters,
                    "sensor": calibration.sensor,
                    "densities_g_cm3": {
                        m.name: m.density_g_cm3 for m in calibration.materials
                    },
                    "cross_sections": calibration.cross_sections,
                    "assumptions": calibration.assumptions,
                }
            ),
            "notes": json.dumps([*session.notes, *scan.notes]),
        }


def start_regression(calibration: Calibration, ready: Responses) -> StartRegression:
    """Start values for one set of responses, from the average of the pixels."""
    weight = ready.weight.mean(axis=0)
    return StartRegression.fit(weight, ready.attenuation, _grid(calibration.largest))


def _grid(largest: NDArray[np.float64]) -> NDArray[np.float64]:
    axis = np.linspace(-0.05, 1.1, 12 if largest.size < 3 else 7)
    mesh = np.meshgrid(*[axis * top for top in largest], indexing="ij")
    return np.stack([m.ravel() for m in mesh], axis=1)


def unpacked(packed: NDArray[np.float64]) -> NDArray[np.float64]:
    """Symmetric matrices (pixel, m, m) from upper triangles (pixel, m(m+1)/2)."""
    size = int((np.sqrt(8 * packed.shape[1] + 1) - 1) / 2)
    full = np.empty((packed.shape[0], size, size))
    i, j = np.triu_indices(size)
    full[:, i, j] = packed
    full[:, j, i] = packed
    return full


def chosen_exposures(scan: Scan, exposures: Sequence[int] | None) -> NDArray[np.int64]:
    """Exposures to decompose.

    Raises
    ------
    ScanError
        If there is none, or one is named that the scan does not hold.
    """
    if exposures is None:
        chosen = scan.exposures("object")
        if chosen.size == 0:
            msg = (
                f"{scan.source}: no exposure has the role 'object'; name the exposures "
                "to decompose"
            )
            raise ScanError(msg)
        return chosen
    chosen = np.array(exposures, np.int64)
    wrong = (chosen < 0) | (chosen >= scan.shape[0])
    if wrong.any() or chosen.size == 0:
        named = ", ".join(map(str, chosen[wrong])) or "none"
        msg = f"{scan.source}: exposures 0 to {scan.shape[0] - 1} exist, asked for {named}"
        raise ScanError(msg)
    return chosen


def check_match(calibration: Calibration, scan: Scan) -> None:
    """Refuse a scan that another detector setting made.

    Raises
    ------
    ScanError
        Saying what differs.
    """
    _, thresholds, y, x = scan.shape
    wanted = calibration.thresholds_kev
    differs = ""
    if (y, x) != calibration.shape:
        differs = f"has {y} x {x} pixels, the calibration {calibration.shape}"
    elif thresholds != wanted.size:
        differs = f"has {thresholds} thresholds, the calibration {wanted.size}"
    elif np.abs(scan.thresholds_kev - wanted).max() > THRESHOLD_TOLERANCE_KEV:
        differs = (
            f"has thresholds at {scan.thresholds_kev.tolist()} keV, the calibration at "
            f"{wanted.tolist()} keV"
        )
    elif abs(scan.voltage_kv - calibration.voltage_kv) > 0.1:
        differs = (
            f"was taken at {scan.voltage_kv:g} kV, the calibration at "
            f"{calibration.voltage_kv:g} kV"
        )
    elif scan.filters and calibration.filters:
        filters = tuple(f"{f.material} {f.thickness_mm:g} mm" for f in scan.filters)
        if sorted(filters) != sorted(calibration.filters):
            differs = (
                f"has the filters {', '.join(filters)}, the calibration "
                f"{', '.join(calibration.filters)}"
            )
    if differs:
        msg = f"{scan.source} {differs}: use the calibration of this setting"
        raise ScanError(msg)
