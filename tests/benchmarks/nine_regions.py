"""An object of nine regions of known areal density, and how well its maps are met.

All figures are in units of the standard deviation of one pixel in one exposure, taken
from the scatter between repeats unless said otherwise.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.decomposition.likelihood import (
    count_derivatives,
    cramer_rao_bound,
    expected_counts,
    fisher_information,
)
from tests.benchmarks.witness_table import FULL_MA

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.decomposition.decomposer import MaterialDecomposer
    from spectral.scans.maps import Maps
    from spectral.scans.scan import Scan
    from tests.benchmarks.witness_table import Instrument

REGIONS = 9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NineRegions:
    """A scan of the object, and what stood in the beam.

    Attributes
    ----------
    scan : Scan
    truth : array, shape (material, row, column), in g/cm2
    region : array of int, shape (row, column)
    repeats : int
    """

    scan: Scan
    truth: NDArray[np.float64]
    region: NDArray[np.int64]
    repeats: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MaterialScore:
    """How well one material is found.

    Attributes
    ----------
    material : str
    bias : array, shape (region,)
        Mean over pixels and repeats less the truth.
    repeat_ratio : array, shape (region,)
        Scatter between repeats over reported error.
    rmse : array, shape (region,)
        Root mean square error over the Cramer-Rao bound at the truth.
    pattern, pattern_error : float
        Spread between pixels that repeats do not remove, over all regions, and its
        standard error.
    stated : float
        Root mean square of the maps' own calibration errors.
    flagged : float
        Share of pixels and exposures.
    """

    material: str
    bias: NDArray[np.float64]
    repeat_ratio: NDArray[np.float64]
    rmse: NDArray[np.float64]
    pattern: float
    pattern_error: float
    stated: float
    flagged: float


def region_of(side: int) -> NDArray[np.int64]:
    """Number of the region of each pixel, shape (row, column)."""
    third = np.minimum(np.arange(side) * 3 // side, 2)
    return np.asarray(3 * third[:, None] + third[None, :])


def expose(
    instrument: Instrument,
    *,
    repeats: int,
    times: float,
    seed: int,
    opens: Sequence[float] = (1.0, 1.0, 1.0, 1.0),
) -> NineRegions:
    """A scan of the object at full current.

    Parameters
    ----------
    instrument : Instrument
    repeats : int
    times : float
        Count time of one exposure over that of a wedge step.
    seed : int
    opens : sequence of float
        Count time of each open exposure over that of the wedge scan's, the first half
        before the object and the others after it.
    """
    region = region_of(instrument.pixels)
    layers = np.moveaxis(np.array(instrument.bench.regions_mm)[region], 2, 0)
    half = (len(opens) + 1) // 2
    before, after = opens[:half], opens[half:]
    role = ["dark", *["open"] * half, *["object"] * repeats, *["open"] * len(after)]
    own = times * instrument.bench.step_time
    seconds = np.array([1.0, *before, *[own] * repeats, *after]) * instrument.full_s
    current = np.where(np.array(role) == "dark", 0.0, FULL_MA)
    seen = instrument.scan(
        role,
        [(0.0, 0.0)] * len(role),
        current.tolist(),
        seconds.tolist(),
        seed=seed,
        object_mm=layers,
    )
    assert seen.object_areal_density is not None
    return NineRegions(
        scan=seen.scan,
        truth=seen.object_areal_density,
        region=region,
        repeats=repeats,
    )


def bound(decomposer: MaterialDecomposer, known: NineRegions) -> NDArray[np.float64]:
    """Smallest standard deviation of one exposure, shape (material, row, column).

    By the calibration's own responses at the true areal densities; NaN where a pixel
    is not used.
    """
    exposure = int(known.scan.exposures("object")[known.repeats // 2])
    ready = decomposer.conditions(exposure).responses
    truth = known.truth.reshape(len(known.truth), -1)[:, ready.flat].T
    at = truth, ready.weight.astype(np.float64), ready.attenuation
    smallest = cramer_rao_bound(
        fisher_information(
            expected_counts(*at), count_derivatives(*at)[0], dead=ready.lost_fraction
        )
    )
    found = np.full((truth.shape[1], known.region.size), np.nan)
    found[:, ready.flat] = np.sqrt(np.einsum("pmm->mp", smallest))
    return found.reshape(known.truth.shape)


def score(
    maps: Maps, known: NineRegions, smallest: NDArray[np.float64]
) -> tuple[MaterialScore, ...]:
    """Figures of each material.

    Parameters
    ----------
    maps : Maps
        Of the object exposures of ``known.scan``.
    known : NineRegions
    smallest : array, shape (material, row, column), in g/cm2
        The bound.
    """
    usable = maps.flags == 0
    found = np.where(usable[:, None], maps.areal_density - known.truth, np.nan)
    whole = usable.all(axis=0)
    return tuple(
        _of_material(
            name,
            found[:, m].astype(np.float64)[:, whole],
            maps.areal_density_errors[:, m].astype(np.float64)[:, whole],
            maps.calibration_errors[:, m].astype(np.float64)[:, whole],
            smallest[m][whole],
            known.region[whole],
            float(1.0 - usable.mean()),
        )
        for m, name in enumerate(maps.material)
    )


def _of_material(
    material: str,
    away: NDArray[np.float64],
    reported: NDArray[np.float64],
    calibration: NDArray[np.float64],
    smallest: NDArray[np.float64],
    region: NDArray[np.int64],
    flagged: float,
) -> MaterialScore:
    """Figures from arrays of shape (repeat, pixel), (pixel,) the last two."""
    repeats = away.shape[0]
    mean, variance = away.mean(axis=0), away.var(axis=0, ddof=1)
    bias, ratio, rmse, pattern, doubt, stated = (np.empty(REGIONS) for _ in range(6))
    for index in range(REGIONS):
        own = region == index
        single = variance[own].mean()
        bias[index] = mean[own].mean() / np.sqrt(single)
        ratio[index] = np.sqrt(single / np.mean(reported[:, own] ** 2))
        rmse[index] = np.sqrt(np.mean(away[:, own] ** 2) / np.mean(smallest[own] ** 2))
        between = mean[own].var(ddof=1) / single
        pattern[index] = between - 1.0 / repeats
        doubt[index] = between**2 * 2.0 / (own.sum() - 1)
        stated[index] = np.mean(calibration[:, own] ** 2) / single
    squared = max(float(pattern.mean()), 0.0)
    error = np.sqrt(doubt.sum()) / REGIONS
    return MaterialScore(
        material=material,
        bias=bias,
        repeat_ratio=ratio,
        rmse=rmse,
        pattern=float(np.sqrt(squared)),
        pattern_error=float(error / (2.0 * np.sqrt(max(squared, error)))),
        stated=float(np.sqrt(stated.mean())),
        flagged=flagged,
    )


def rms(values: NDArray[np.float64]) -> float:
    """Root mean square."""
    return float(np.sqrt(np.mean(np.square(values))))
