"""Energy bins, and spectra over them: filters, tables, mean energy.

A spectrum is photons per bin, in an array of shape (bin,), with the bins' borders
beside it. Cross sections are taken at bin centres, so a bin must not straddle an
absorption edge: `energy_bins` puts borders on the edges it is given.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import FileFormatError, InputError
from spectral.physics.cross_sections import k_edge_kev

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from numpy.typing import ArrayLike, NDArray

    from spectral.physics.materials import Material

# Borders nearer to an edge than this share of the bin width move onto it.
_MERGE = 0.25


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EnergyBins:
    """Bins of photon energy.

    Attributes
    ----------
    borders_kev : array, shape (bin + 1,), in keV
    centres_kev : array, shape (bin,), in keV
    """

    borders_kev: NDArray[np.float64]
    centres_kev: NDArray[np.float64]

    @property
    def widths_kev(self) -> NDArray[np.float64]:
        """Width of each bin in keV, shape (bin,)."""
        return np.diff(self.borders_kev)


def energy_bins(
    low_kev: float,
    high_kev: float,
    width_kev: float,
    *,
    edges_kev: Iterable[float] = (),
) -> EnergyBins:
    """Bins of about one width, with borders on the given absorption edges.

    Parameters
    ----------
    low_kev, high_kev : float, in keV
        First and last border.
    width_kev : float, in keV
        Width of the bins away from the edges.
    edges_kev : iterable of float, in keV
        Each becomes a border if it lies inside; a regular border within a quarter
        width of it gives way.

    Returns
    -------
    EnergyBins
        Widths between 0.25 and 1.5 of `width_kev`, unless edges stand closer.

    Raises
    ------
    InputError
        If the range is empty or the width is not positive.

    Examples
    --------
    >>> energy_bins(30, 36, 2, edges_kev=[33.169]).borders_kev
    array([30.   , 32.   , 33.169, 34.   , 36.   ])
    """
    if not 0.0 < low_kev < high_kev < np.inf:
        msg = f"energy range {low_kev:g} to {high_kev:g} keV is empty or not positive"
        raise InputError(msg)
    if not 0.0 < width_kev < np.inf:
        msg = f"bin width {width_kev:g} keV must be positive"
        raise InputError(msg)
    count = max(1, round((high_kev - low_kev) / width_kev))
    regular = np.linspace(low_kev, high_kev, count + 1)
    inside = np.unique([edge for edge in edges_kev if low_kev < edge < high_kev])
    if inside.size:
        nearest = np.abs(regular[:, None] - inside).min(axis=1)
        keep = nearest >= _MERGE * width_kev
        keep[[0, -1]] = True
        regular = np.union1d(regular[keep], inside)
    return EnergyBins(
        borders_kev=regular, centres_kev=0.5 * (regular[1:] + regular[:-1])
    )


def k_edges_kev(
    materials: Iterable[Material], *, lowest_kev: float = 5.0
) -> list[float]:
    """K edges above `lowest_kev` of all elements in the materials, rising, in keV."""
    elements = {
        element for material in materials for element in material.weight_fractions
    }
    edges = {k_edge_kev(element) for element in elements}
    return sorted(edge for edge in edges if edge >= lowest_kev)


def filtered(
    photons: ArrayLike,
    energy_kev: ArrayLike,
    layers: Sequence[tuple[Material, float]],
) -> NDArray[np.float64]:
    """Spectrum behind plates of given thickness.

    Parameters
    ----------
    photons : array, shape (..., bin)
        Photons per bin.
    energy_kev : array, shape (bin,), in keV
        Bin centres.
    layers : sequence of (Material, thickness in mm)
        Plates in the beam, in any order.

    Returns
    -------
    array, shape (..., bin)

    Raises
    ------
    InputError
        If the shapes differ or a thickness is negative or not a number.

    Notes
    -----
    Narrow beam: what scatters is lost.
    """
    energy = np.asarray(energy_kev, dtype=np.float64)
    spectrum = np.array(photons, dtype=np.float64)
    if energy.ndim != 1 or spectrum.shape[-1:] != energy.shape:
        msg = (
            f"photons have shape {spectrum.shape}, energy_kev has {energy.shape}: "
            "the last axes must agree"
        )
        raise InputError(msg)
    for material, thickness_mm in layers:
        if not 0.0 <= thickness_mm < np.inf:
            msg = f"filter {material.name!r} has thickness {thickness_mm!r} mm"
            raise InputError(msg)
        depth = material.areal_density(thickness_mm) * material.mass_attenuation(energy)
        spectrum *= np.exp(-depth)
    return spectrum


def mean_energy(photons: ArrayLike, energy_kev: ArrayLike) -> float:
    """Photon-weighted mean energy in keV."""
    weights = np.asarray(photons, dtype=np.float64)
    return float(weights @ np.asarray(energy_kev, dtype=np.float64) / weights.sum())


def rebinned(
    energy_kev: ArrayLike, photons_per_kev: ArrayLike, borders_kev: ArrayLike
) -> NDArray[np.float64]:
    """Photons per bin of a spectrum that is tabulated as photons per keV.

    Parameters
    ----------
    energy_kev : array, shape (point,), in keV
        Rising energies of the table.
    photons_per_kev : array, shape (point,)
        Not negative. Taken as linear between points, and as zero outside them.
    borders_kev : array, shape (bin + 1,), in keV

    Returns
    -------
    array, shape (bin,)
        The exact integral of the broken line over each bin.

    Raises
    ------
    InputError
        If energies do not rise, values are negative, or lengths differ.
    """
    energy = np.asarray(energy_kev, dtype=np.float64)
    density = np.asarray(photons_per_kev, dtype=np.float64)
    if energy.ndim != 1 or energy.size < 2 or energy.shape != density.shape:
        msg = (
            f"a tabulated spectrum needs two columns of equal length, got "
            f"{energy.shape} energies and {density.shape} values"
        )
        raise InputError(msg)
    if not np.all(np.diff(energy) > 0.0):
        msg = "energies of a tabulated spectrum must rise"
        raise InputError(msg)
    if not (np.all(density >= 0.0) and np.any(density > 0.0)):
        msg = "values of a tabulated spectrum must not be negative, nor all zero"
        raise InputError(msg)
    borders = np.asarray(borders_kev, dtype=np.float64)
    points = np.union1d(energy, np.clip(borders, energy[0], energy[-1]))
    values = np.interp(points, energy, density)
    steps = 0.5 * (values[1:] + values[:-1]) * np.diff(points)
    below = np.concatenate([[0.0], np.cumsum(steps)])
    return np.diff(np.interp(borders, points, below))


def read_spectrum(path: str | Path, borders_kev: ArrayLike) -> NDArray[np.float64]:
    """Photons per bin from a text file of two columns: keV, photons per keV.

    Columns are parted by comma, semicolon, tab or blanks; lines that start with "#"
    and one line of headings are skipped. Only as good as the file: nothing says what
    filters it holds already.

    Raises
    ------
    FileFormatError
        If a line is not two numbers, or the columns are no spectrum.
    """
    rows: list[tuple[float, float]] = []
    lines = Path(path).read_text(encoding="utf-8-sig").splitlines()
    heading_allowed = True
    for number, line in enumerate(lines, start=1):
        words = line.replace(",", " ").replace(";", " ").split()
        if not words or words[0].startswith("#"):
            continue
        try:
            energy, value = (float(word) for word in words)
        except ValueError as error:
            if heading_allowed and not rows:
                heading_allowed = False
                continue
            msg = f"{path}, line {number}: wanted energy in keV and photons per keV"
            raise FileFormatError(msg) from error
        rows.append((energy, value))
    table = np.array(rows, dtype=np.float64).reshape(-1, 2)
    try:
        return rebinned(table[:, 0], table[:, 1], borders_kev)
    except InputError as error:
        msg = f"{path}: {error}"
        raise FileFormatError(msg) from error
