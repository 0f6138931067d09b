"""Transmission through materials, and half-value layers."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from spectral.physics.materials import Material

# Mass energy-absorption coefficient of dry air, in cm2/g.
# Source: J. H. Hubbell, S. M. Seltzer, NIST SRD 126 (2004), table 4, from memory.
_AIR_KEV = np.array(
    [5.0, 6.0, 8.0, 10.0, 15.0, 20.0, 30.0, 40.0, 50.0, 60.0, 80.0, 100.0, 150.0, 200.0]
)
_AIR_CM2_G = np.array(
    [
        *(39.31, 22.70, 9.446, 4.742, 1.334, 0.5389, 0.1537, 0.06833, 0.04098),
        *(0.03041, 0.02407, 0.02325, 0.02496, 0.02672),
    ]
)


def transmission(
    mass_attenuation_cm2_g: ArrayLike, areal_density_g_cm2: ArrayLike
) -> NDArray[np.float64]:
    r"""Share of photons that pass a stack of materials.

    Parameters
    ----------
    mass_attenuation_cm2_g : array, shape (material, energy), in cm2/g
    areal_density_g_cm2 : array, shape (..., material), in g/cm2
        May be negative: estimators step there.

    Returns
    -------
    array, shape (..., energy)
        :math:`\exp(-\sum_m (\mu/\rho)_m(E)\, a_m)`.

    Raises
    ------
    InputError
        If the two material axes differ in length.

    Notes
    -----
    Narrow beam; scatter into the detector is left out.

    Examples
    --------
    >>> transmission([[0.2]], [5.0]).round(6)
    array([0.367879])
    """
    mu = np.asarray(mass_attenuation_cm2_g, dtype=np.float64)
    areal = np.asarray(areal_density_g_cm2, dtype=np.float64)
    if mu.ndim != 2 or areal.ndim == 0 or mu.shape[0] != areal.shape[-1]:
        msg = (
            f"mass_attenuation_cm2_g has shape {mu.shape}, areal_density_g_cm2 has "
            f"{areal.shape}: wanted (material, energy) and (..., material)"
        )
        raise InputError(msg)
    return np.asarray(np.exp(-areal @ mu))


def air_kerma_weight(energy_kev: ArrayLike) -> NDArray[np.float64]:
    """Air kerma per photon and area, in keV cm2/g: energy times mu_en/rho of dry air.

    Log-log cubic between the table's energies, 5 to 200 keV.

    Raises
    ------
    InputError
        If an energy is outside the table.
    """
    energy = np.asarray(energy_kev, dtype=np.float64)
    if energy.size and not (
        energy.min() >= _AIR_KEV[0] and energy.max() <= _AIR_KEV[-1]
    ):
        msg = (
            f"air kerma is tabulated from {_AIR_KEV[0]:g} to {_AIR_KEV[-1]:g} keV, got "
            f"{energy.min():g} to {energy.max():g} keV"
        )
        raise InputError(msg)
    return np.asarray(energy * np.exp(_log_air()(np.log(energy))))


def half_value_layer(
    photons: ArrayLike,
    energy_kev: ArrayLike,
    material: Material,
    *,
    fraction: float = 0.5,
    weight: ArrayLike | None = None,
) -> float:
    """Thickness in mm that brings the signal of a spectrum down to a fraction.

    Parameters
    ----------
    photons : array, shape (bin,)
        Photons per bin.
    energy_kev : array, shape (bin,), in keV
        Bin centres.
    material : Material
        What the plates are made of.
    fraction : float
        0.5 for the first half-value layer; 0.25 for the first and second together.
    weight : array, shape (bin,), optional
        Signal per photon; air kerma if left out.

    Returns
    -------
    float, in mm

    Raises
    ------
    InputError
        If the fraction is not between 0 and 1 or the spectrum is empty.

    Notes
    -----
    Homogeneity coefficient: first over second half-value layer.
    Source: IEC 61267 (2005), definitions; narrow beam.
    """
    if not 0.0 < fraction < 1.0:
        msg = f"fraction {fraction!r} must be between 0 and 1"
        raise InputError(msg)
    energy = np.asarray(energy_kev, dtype=np.float64)
    per_photon = air_kerma_weight(energy) if weight is None else np.asarray(weight)
    signal = np.asarray(photons, dtype=np.float64) * per_photon
    if not (np.all(signal >= 0.0) and signal.sum() > 0.0):
        msg = "a half-value layer needs a spectrum that is not negative and not empty"
        raise InputError(msg)
    share = signal / signal.sum()
    mu_per_mm = material.mass_attenuation(energy) * material.areal_density(1.0)

    def excess(thickness_mm: float) -> float:
        return float(share @ np.exp(-mu_per_mm * thickness_mm)) - fraction

    # The smallest coefficient of the spectrum gives a thickness that is enough.
    lit = mu_per_mm[share > 0.0]
    upper = -np.log(fraction) / lit.min() * (1.0 + 1e-9)
    return float(brentq(excess, 0.0, upper, xtol=1e-10, rtol=1e-12))


def homogeneity(photons: ArrayLike, energy_kev: ArrayLike, material: Material) -> float:
    """First half-value layer over the second, in air kerma: 1 for a single energy."""
    first = half_value_layer(photons, energy_kev, material)
    both = half_value_layer(photons, energy_kev, material, fraction=0.25)
    return first / (both - first)


@cache
def _log_air() -> CubicSpline:
    return CubicSpline(np.log(_AIR_KEV), np.log(_AIR_CM2_G))
