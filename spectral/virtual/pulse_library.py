"""Pulse heights that single photons leave in a pixel, ordered, by photon energy."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.kernels.photon_transport import transport
from spectral.kernels.random_stream import substream_array
from spectral.virtual.sensor_tables import HIGHEST_KEV, SensorTables, sensor_tables

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from spectral.virtual.detector import VirtualSensor

LOWEST_KEV = 5.0
BIN_KEV = 0.5
FLOOR_KEV = 1.0
"""Smaller pulses are left out: far below any threshold, they only lift the baseline."""
QUANTILES = 2048
_ROOM = 16


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PulseEvents:
    """What photons of one energy bin left, photon by photon.

    Attributes
    ----------
    height_kev : array of float32, shape (pulse,), in keV
    offset : array of int16, shape (pulse, 2)
        Row and column of the pixel, from the one the photon came upon.
    begin : array, shape (photon + 1,)
        First pulse of each photon.
    """

    height_kev: NDArray[np.float32]
    offset: NDArray[np.int16]
    begin: NDArray[np.int64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PulseLibrary:
    """Pulses per incident photon, and their ordered heights, for each energy bin.

    Attributes
    ----------
    sensor : VirtualSensor
    borders_kev : array, shape (energy + 1,), in keV
    pulses_per_photon : array, shape (energy,)
        Over all pixels; equally, in one pixel under an even field of photons.
    quantiles_kev : array of float32, shape (energy, quantile), in keV
        Pulse heights at equal steps of probability from 0 to 1.
    events : tuple of PulseEvents, length energy
        Empty unless they were kept.
    """

    sensor: VirtualSensor
    borders_kev: NDArray[np.float64]
    pulses_per_photon: NDArray[np.float64]
    quantiles_kev: NDArray[np.float32]
    events: tuple[PulseEvents, ...] = ()

    @property
    def energy_kev(self) -> NDArray[np.float64]:
        """Middle of each energy bin, in keV."""
        return 0.5 * (self.borders_kev[1:] + self.borders_kev[:-1])

    def response(self, threshold_kev: NDArray[np.float64]) -> NDArray[np.float64]:
        """Mean pulses above each threshold per photon, without electronic noise.

        Returns an array of shape (energy, threshold).
        """
        place = np.linspace(0.0, 1.0, self.quantiles_kev.shape[1])
        above = np.array(
            [
                1.0 - np.interp(threshold_kev, row, place, left=0.0, right=1.0)
                for row in self.quantiles_kev
            ]
        )
        return np.asarray(above * self.pulses_per_photon[:, None])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RecordedPhotons:
    """Events of all energies in one row, of the photons that left a pulse at all.

    Attributes
    ----------
    share : array, shape (energy,)
        Of the photons that left a pulse.
    first_photon : array, shape (energy + 1,)
    begin : array, shape (photon + 1,)
    height_kev : array of float32, shape (pulse,), in keV
    offset : array of int16, shape (pulse, 2)
    """

    share: NDArray[np.float64]
    first_photon: NDArray[np.int64]
    begin: NDArray[np.int64]
    height_kev: NDArray[np.float32]
    offset: NDArray[np.int16]


def recorded_photons(library: PulseLibrary) -> RecordedPhotons:
    """Events of a library that kept them.

    Raises
    ------
    InputError
        If it did not.
    """
    if not library.events:
        msg = "this library kept no events: build it with keep_events=True"
        raise InputError(msg)
    pulses = [np.diff(events.begin) for events in library.events]
    left = [each[each > 0] for each in pulses]
    return RecordedPhotons(
        share=np.array([(each > 0).mean() for each in pulses]),
        first_photon=np.concatenate([[0], np.cumsum([each.size for each in left])]),
        begin=np.concatenate([[0], np.cumsum(np.concatenate(left))]),
        height_kev=np.concatenate([events.height_kev for events in library.events]),
        offset=np.concatenate([events.offset for events in library.events]),
    )


def energy_borders(
    highest_kev: float, edges_kev: tuple[float, ...] = ()
) -> NDArray[np.float64]:
    """Borders of energy bins up to a tube voltage, with one on each edge given."""
    count = int(np.ceil((highest_kev - LOWEST_KEV) / BIN_KEV - 1e-9))
    regular = LOWEST_KEV + BIN_KEV * np.arange(count + 1)
    regular[-1] = highest_kev
    inside = [edge for edge in edges_kev if LOWEST_KEV < edge < highest_kev]
    borders = np.unique(np.concatenate([regular, inside]))
    # two borders closer than 10 eV are one
    apart = np.concatenate([[True], np.diff(borders) > 0.01])
    return np.asarray(borders[apart])


def build_library(
    sensor: VirtualSensor,
    borders_kev: NDArray[np.float64],
    *,
    seed: int,
    photons_per_bin: int = 20_000,
    keep_events: bool = False,
    threads: int = 2,
    progress: Callable[[int, int], None] | None = None,
) -> PulseLibrary:
    """Library of a sensor, from photons followed one by one.

    Parameters
    ----------
    sensor : VirtualSensor
    borders_kev : array, shape (energy + 1,), in keV
        Photon energies are even within each bin.
    seed : int
    photons_per_bin : int
    keep_events : bool
        Keep each photon's pulses too (for pixels that count together).
    threads : int
        Changes nothing but the time it takes.
    progress : callable, optional
        Called with the bins done and their number.

    Returns
    -------
    PulseLibrary

    Raises
    ------
    InputError
        If the borders do not rise within 1 to 200 keV, or a cloud is too large for
        the pixel.
    """
    borders = np.asarray(borders_kev, dtype=np.float64)
    rising = borders.size >= 2 and bool(np.all(np.diff(borders) > 0.0))
    if not rising or borders[0] < 1.0 or borders[-1] > HIGHEST_KEV:
        msg = f"borders_kev must rise within 1 to {HIGHEST_KEV:g} keV, got {borders}"
        raise InputError(msg)
    tables = sensor_tables(sensor)
    largest = float(tables.cloud_um[min(int(borders[-1]) + 1, HIGHEST), -1])
    if largest > sensor.pitch_um / 3.0:
        msg = (
            f"sensor: the charge cloud grows to {largest:.1f} um, more than a third of "
            f"pitch_um = {sensor.pitch_um:g}; raise bias_v or pitch_um"
        )
        raise InputError(msg)
    key = substream_array(np.array([seed], np.uint64), np.array([0], np.uint64))[0]

    def one_bin(e: int) -> PulseEvents:
        return _transport_bin(
            tables, key, e, (borders[e], borders[e + 1]), photons_per_bin
        )

    rates = np.zeros(borders.size - 1)
    quantiles = np.zeros((borders.size - 1, QUANTILES + 1), np.float32)
    place = np.linspace(0.0, 1.0, QUANTILES + 1)
    kept: list[PulseEvents] = []
    with ThreadPoolExecutor(max_workers=threads) as pool:
        for e, events in enumerate(pool.map(one_bin, range(borders.size - 1))):
            rates[e] = events.height_kev.size / photons_per_bin
            if events.height_kev.size:
                quantiles[e] = np.quantile(events.height_kev, place)
            if keep_events:
                kept.append(events)
            if progress is not None:
                progress(e + 1, borders.size - 1)
    return PulseLibrary(
        sensor=sensor,
        borders_kev=borders,
        pulses_per_photon=rates,
        quantiles_kev=quantiles,
        events=tuple(kept),
    )


HIGHEST = int(HIGHEST_KEV)


def _transport_bin(
    tables: SensorTables,
    key: np.uint64,
    number: int,
    energy_kev: tuple[float, float],
    photons: int,
) -> PulseEvents:
    """Events of one energy bin."""
    height = np.empty(_ROOM * photons, np.float32)
    offset = np.empty((_ROOM * photons, 2), np.int16)
    begin = np.empty(photons + 1, np.int64)
    pulses = transport(
        key, number * photons, photons, energy_kev[0], energy_kev[1], tables.slab,
        tables.grid, tables.attenuation, tables.photo_share, tables.line_reach,
        tables.line_kev, tables.cosines, tables.cloud_um, tables.collected,
        FLOOR_KEV, height, offset, begin,
    )  # fmt: skip
    return PulseEvents(
        height_kev=height[:pulses].copy(), offset=offset[:pulses].copy(), begin=begin
    )
