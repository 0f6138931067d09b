"""Compton scattering of a photon in the sensor."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

ELECTRON_REST_KEV = 510.99895
"""Electron rest energy, in keV (CODATA 2018)."""


def scattered_energy_kev(
    energy_kev: NDArray[np.float64], cosine: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Energy of a photon after Compton scattering, in keV (broadcasting).

    Source: A. H. Compton, Phys. Rev. 21 (1923) 483.
    """
    ratio = energy_kev / ELECTRON_REST_KEV
    return np.asarray(energy_kev / (1.0 + ratio * (1.0 - cosine)))


def scattering_cosine(
    energy_kev: NDArray[np.float64], quantile: NDArray[np.float64], *, cells: int = 400
) -> NDArray[np.float64]:
    """Cosines of the scattering angle at given quantiles of their distribution.

    Parameters
    ----------
    energy_kev : array, shape (energy,), in keV
    quantile : array, shape (sample,), in [0, 1]
    cells : int
        Cells of the tabulated distribution function.

    Returns
    -------
    array, shape (energy, sample)

    Notes
    -----
    Free electrons at rest; binding is left out, which at the energies where Si
    scatters most changes the recoil's spread, not its mean.
    Source: O. Klein, Y. Nishina, Z. Phys. 52 (1929) 853.
    """
    border = np.linspace(-1.0, 1.0, cells + 1)
    centre = 0.5 * (border[1:] + border[:-1])
    out = np.empty((energy_kev.size, quantile.size))
    for i, energy in enumerate(energy_kev):
        left = scattered_energy_kev(np.asarray(energy), centre) / energy
        density = left**2 * (left + 1.0 / left - 1.0 + centre**2)
        reached = np.concatenate([[0.0], np.cumsum(density)])
        out[i] = np.interp(quantile, reached / reached[-1], border)
    return out
