"""From an object scan and a calibration to maps with errors and flags."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from sklearn.base import BaseEstimator, TransformerMixin

from spectral.calibration.open_pattern import open_pattern
from spectral.calibration.refresh import updated_by_opens
from spectral.decomposition.block_maps import BlockMaps, joined, unpacked
from spectral.decomposition.conditions import Conditions, ConditionsStore
from spectral.decomposition.judging import (
    domain_facets,
    judge,
    misfit_limit,
    rate_share,
    sigmas_outside,
)
from spectral.decomposition.object_scan import check_match, chosen_exposures
from spectral.decomposition.responses import calibration_spread
from spectral.decomposition.session import Session, current_of, normalise
from spectral.decomposition.solver import SolveOutcome, solve
from spectral.errors import InputError, ScanError
from spectral.forward.counting_model import counts_to_bins
from spectral.scans.bad_pixels import commonest_reason, find_bad_pixels
from spectral.scans.counts_faults import count_faults
from spectral.scans.flags import PixelFlag

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.decomposition.solver import Solution
    from spectral.scans.maps import Maps
    from spectral.scans.scan import Scan

OPENS_BYTES = 2**27
"""Of dark and open counts in which bad pixels are looked for."""
STRIP = 200_000
"""Pixels whose weights are held at once."""
ENDED_WELL = (SolveOutcome.CONVERGED, SolveOutcome.FEW_COUNTS)


class MaterialDecomposer(TransformerMixin, BaseEstimator):  # type: ignore[misc]
    """Maximum-likelihood areal densities of basis materials.

    Parameters
    ----------
    calibration : Calibration
    bias_correction : bool
        Take off the first-order bias of maximum likelihood.
    nonnegative : bool
        Keep areal densities at or above 0; averages of such maps are biased.
    follow_pixels : bool
        Let the scan's own open exposures sharpen each pixel's departures.
    threads : int
        Threads of the solver.

    Attributes
    ----------
    calibration_ : Calibration
        After `fit`: what was given, its pixels followed by the scan's opens if wished.
    session_ : Session
        After `fit`: the tube's output in the scan.
    followed_ : bool
        After `fit`: whether they were; a scan without opens has nothing to follow.
    pattern_ : OpenPattern or None
        After `fit`: how much of the calibration's pattern the opens show.
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
        follow_pixels: bool = True,
        threads: int = 2,
    ) -> None:
        self.calibration = calibration
        self.follow_pixels = follow_pixels
        self.bias_correction = bias_correction
        self.nonnegative = nonnegative
        self.threads = threads

    def fit(self, scan: Scan) -> MaterialDecomposer:
        """Read the session off a scan's dark and open exposures.

        Raises
        ------
        ScanError
            If scan and calibration are not of one detector setting.
        """
        check_match(self.calibration, scan)
        self.bad_ = find_bad_pixels(scan, most_bytes=OPENS_BYTES)
        self.usable_ = self.calibration.good & (self.bad_ == 0)
        if not self.usable_.any():
            msg = f"{scan.source}: no pixel is sound in both scan and calibration"
            reason = commonest_reason(self.bad_)
            raise ScanError(f"{msg}; of most in the scan, {reason}" if reason else msg)
        self.calibration_ = self.calibration
        self.pattern_ = open_pattern(self.calibration, scan, self.usable_)
        self.followed_ = self.follow_pixels and scan.exposures("open").size > 0
        if self.followed_:
            self.calibration_ = updated_by_opens(self.calibration, scan, bad=self.bad_)
        self.flat_ = np.flatnonzero(self.usable_.ravel())
        self.session_: Session = normalise(self.calibration_, scan, self.usable_)
        self.current_ = current_of(scan, self.calibration_)
        self.count_time_ = scan.count_time_s
        self._store = ConditionsStore(self.calibration_, threads=self.threads)
        self._facets = domain_facets(self.calibration_.steps.areal_density)
        return self

    def conditions(
        self, exposure: int, flat: NDArray[np.int64] | None = None
    ) -> Conditions:
        """Responses at an exposure's current, output and count time."""
        return self._store.at(
            float(self.current_[exposure]),
            float(self.session_.output[exposure]),
            float(self.count_time_[exposure]),
            self.flat_ if flat is None else flat,
        )

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
        if counts.shape != (self.flat_.size, self.calibration_.levels_kev.size):
            msg = (
                f"counts has shape {counts.shape}, the fitted pixels need "
                f"{(self.flat_.size, self.calibration_.levels_kev.size)}"
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
            parts.append(self.block(scan, [int(exposure)]))
            if progress is not None:
                progress((i + 1) / chosen.size)
        return joined(parts, self.record(scan, chosen))

    def block(self, scan: Scan, exposures: Sequence[int]) -> Maps:
        """Maps of some exposures, without the record of the run."""
        return self.maps_of(
            scan.counts.read(list(exposures)), exposures, scan.count_limit
        )

    def maps_of(
        self, above: NDArray[np.uint32], exposures: Sequence[int], count_limit: int
    ) -> Maps:
        """Maps of counts that were read before.

        Parameters
        ----------
        above : array, shape (exposure, threshold, row, column)
        exposures : sequence of int
            Their indices in the scan, whose conditions hold.
        count_limit : int
        """
        faults = count_faults(above, count_limit=count_limit) != 0
        filled = BlockMaps.empty(
            len(exposures), len(self.calibration_.materials), above.shape[2:]
        )
        counts = above.reshape(*above.shape[:2], -1)
        for first in range(0, self.flat_.size, STRIP):
            flat = self.flat_[first : first + STRIP]
            for i, exposure in enumerate(exposures):
                picked = counts[i][:, flat].T.astype(np.float64)
                self._fill(filled, i, exposure, flat, picked, faults[i].ravel()[flat])
        return filled.maps(
            tuple(m.name for m in self.calibration_.materials),
            np.asarray(exposures, np.int32),
        )

    def _fill(
        self,
        filled: BlockMaps,
        place: int,
        exposure: int,
        flat: NDArray[np.int64],
        above: NDArray[np.float64],
        faulty: NDArray[np.bool_],
    ) -> None:
        """Solve some pixels of one exposure and put them into the block's maps."""
        where = self.conditions(exposure, flat)
        counts = counts_to_bins(above)
        found = self._solve(np.maximum(counts, 0.0), where)
        full = unpacked(found.covariance)
        spread, extra, seen = calibration_spread(
            self.calibration_,
            where.tables,
            where.responses,
            np.nan_to_num(found.areal_density),
            np.nan_to_num(full),
            count_time_s=float(self.count_time_[exposure]),
            output=where.output,
            threads=self.threads,
        )
        more = self._overlaps(exposure, where, seen)
        found = replace(found, covariance=found.covariance * (1.0 + more[:, None]))
        full *= 1.0 + more[:, None, None]
        flags = judge(
            total_counts=above[:, 0],
            outside=sigmas_outside(found.areal_density, full, self._facets),
            deviance=found.deviance,
            limit=misfit_limit(counts.shape[1] - full.shape[1], extra + more),
            converged=np.isin(found.outcome, ENDED_WELL),
            over_rate=rate_share(above[:, 0], where.rate_limit),
        )
        flags[faulty] |= np.uint16(PixelFlag.COUNT_FAULT)
        lost = ~np.isfinite(found.areal_density).all(axis=1)
        flags[lost & (flags == 0)] |= np.uint16(PixelFlag.NOT_CONVERGED)
        filled.put(place, flat, found, spread, flags)

    def _overlaps(
        self, exposure: int, where: Conditions, seen: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Relative excess of each estimate's variance by overlapping pulses."""
        rate = seen / float(self.count_time_[exposure])
        return where.overlap_excess * rate * self.calibration_.dead_time_ns * 1e-9

    def record(self, scan: Scan, chosen: NDArray[np.int64]) -> dict[str, str]:
        """What belongs in the maps' record of the run."""
        error = max(
            self._store.tables(float(self.current_[e]), float(self.session_.output[e]))[
                0
            ].error
            for e in chosen
        )
        session = self.session_
        calibration = self.calibration_
        pattern = []
        if self.pattern_ is not None and self.pattern_.is_other:
            pattern.append(self.pattern_.note)
        return {
            "options": json.dumps(
                {
                    "bias_correction": self.bias_correction,
                    "nonnegative": self.nonnegative,
                    "follow_pixels": self.followed_,
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
            "node_error": json.dumps(error),
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
            "notes": json.dumps([*pattern, *session.notes, *scan.notes]),
        }
