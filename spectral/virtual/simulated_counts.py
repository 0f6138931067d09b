"""Counts of a virtual scan, simulated exposure by exposure as they are read."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.virtual.exposure import Beam, VirtualBench

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan
    from spectral.virtual.tube import VirtualTube

MOST_PHOTONS = 1e8
"""Upon one pixel in one exposure: each is followed, which takes some ten seconds."""


class TooManyPhotonsError(InputError):
    """More photons fall upon a pixel than can be followed one by one.

    Attributes
    ----------
    exposure : int
    why : str
        The sentence without its subject, the exposure.
    """

    def __init__(self, exposure: int, role: str, photons: float) -> None:
        self.exposure = exposure
        self.why = (
            f"would send {photons:.2g} photons upon a pixel, and the simulator follows "
            f"each, up to {MOST_PHOTONS:.0e}: lower photons_per_mas, the current or the "
            "count time"
        )
        super().__init__(f"exposure {exposure} ({role}) {self.why}")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SimulatedCounts:
    """Counts that are simulated when they are read; the same each time.

    Attributes
    ----------
    bench : VirtualBench
    template : Scan
    tube : VirtualTube
    current_ma, areal_density : arrays, shape (exposure,), (exposure, material)
        What truly was, in mA and g/cm2.
    object_areal_density : array, shape (material, row, column), in g/cm2, or None
    threshold_drift_kev : array, shape (exposure, 1 or row, 1 or column)
    output : array, shape (exposure,)
    progress : callable or None
    """

    bench: VirtualBench
    template: Scan
    tube: VirtualTube
    current_ma: NDArray[np.float64]
    areal_density: NDArray[np.float64]
    object_areal_density: NDArray[np.float64] | None
    threshold_drift_kev: NDArray[np.float64]
    output: NDArray[np.float64]
    progress: Callable[[int, int], None] | None = None

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(exposure, threshold, row, column)."""
        return self.template.shape

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Counts of the named exposures, simulated one after another."""
        counts = np.empty((len(exposures), *self.shape[1:]), np.uint32)
        for place, exposure in enumerate(exposures):
            counts[place] = self.bench.expose(
                int(exposure),
                self.beam(int(exposure)),
                threshold_offset_kev=self.threshold_drift_kev[exposure],
                progress=self._counted_on(place, len(exposures)),
            )
        return counts

    def beam(self, exposure: int) -> Beam:
        """What falls upon the pixels in an exposure."""
        _, _, rows, columns = self.shape
        role = self.template.role[exposure]
        rate = 0.0 if role == "dark" else self.current_ma[exposure]
        rate *= self.tube.photons_per_mas * self.output[exposure]
        crossed = self.areal_density[exposure][:, None, None]
        if role == "object" and self.object_areal_density is not None:
            crossed = self.object_areal_density
        full = (crossed.shape[0], rows, columns)
        anode = self.tube.anode_path_g_cm2(rows)[None, :, None]
        return Beam(
            duration_s=float(self.template.count_time_s[exposure]),
            photons_per_s=np.repeat(
                rate * self.tube.over_rows(rows)[:, None], columns, axis=1
            ),
            areal_density=np.concatenate(
                [
                    np.broadcast_to(crossed, full),
                    np.broadcast_to(anode, (1, rows, columns)),
                ]
            ),
        )

    def refuse_too_many(self) -> None:
        """Refuse exposures whose photons would take hours to follow.

        Raises
        ------
        TooManyPhotonsError
            Naming the first such exposure.
        """
        brightest = float(self.tube.over_rows(self.shape[2]).max())
        for i, role in enumerate(self.template.role):
            charge = float(self.current_ma[i]) * float(self.template.count_time_s[i])
            free = charge * float(self.output[i]) * brightest
            free *= self.tube.photons_per_mas
            if role == "dark" or free <= MOST_PHOTONS:
                continue
            areal = self.beam(i).areal_density
            thinnest = areal.reshape(len(areal), -1).min(axis=1)
            passed = self.bench.spectrum @ np.exp(-thinnest @ self.bench.attenuation)
            photons = free * float(passed)
            if not photons <= MOST_PHOTONS:
                raise TooManyPhotonsError(i, role, photons)

    def _counted_on(self, place: int, exposures: int) -> Callable[[int], None] | None:
        """Progress within one exposure, counted on from those before."""
        told = self.progress
        if told is None:
            return None
        pixels = self.shape[2] * self.shape[3]
        return lambda done: told(place * pixels + done, exposures * pixels)
