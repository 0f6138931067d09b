"""Electrons in a thick tungsten target: slowing down, radiation, escape of photons."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial.legendre import Legendre, leggauss
from scipy.interpolate import CubicSpline, RectBivariateSpline

from spectral.physics import tube_tables as tables
from spectral.physics.cross_sections import (
    HIGHEST_KEV,
    LOWEST_KEV,
    atomic_mass,
    atomic_number,
    mass_attenuation,
)

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

ELEMENT = "W"
ELECTRON_REST_KEV = 510.999  # CODATA 2018
AVOGADRO_PER_MOL = 6.02214076e23  # SI, exact
# Source: ICRU Report 37 (1984), mean excitation energy of tungsten.
MEAN_EXCITATION_KEV = 0.727
# The path length that scales the depths ends here.
_STOPPED_KEV = 5.0
_NODES, _WEIGHTS = leggauss(20)


def stopping_power(electron_kev: ArrayLike) -> NDArray[np.float64]:
    """Collision stopping power of tungsten for electrons, in keV cm2/g.

    Notes
    -----
    Bethe's formula with Moller scattering, without density effect and without losses
    by radiation (1 to 5 % of all); not to be trusted under some 5 keV.
    Source: ICRU Report 37 (1984), eq. 2.2 (as M. J. Berger, S. M. Seltzer), constant
    0.153536 MeV cm2/mol.
    """
    tau = np.asarray(electron_kev, dtype=np.float64) / ELECTRON_REST_KEV
    beta2 = tau * (tau + 2.0) / (tau + 1.0) ** 2
    moller = (
        1.0
        - beta2
        + (tau**2 / 8.0 - (2.0 * tau + 1.0) * np.log(2.0)) / (tau + 1.0) ** 2
    )
    excitation = MEAN_EXCITATION_KEV / ELECTRON_REST_KEV
    logarithm = np.log(tau**2 * (tau + 2.0) / (2.0 * excitation**2))
    scale = 153.536 * atomic_number(ELEMENT) / atomic_mass(ELEMENT)
    return np.asarray(scale / beta2 * (logarithm + moller))


def path_length(electron_kev: float) -> float:
    """Path in g/cm2 that an electron walks until it is slowed down to 5 keV."""
    half = 0.5 * (electron_kev - _STOPPED_KEV)
    energy = _STOPPED_KEV + half * (_NODES + 1.0)
    return float(half * np.sum(_WEIGHTS / stopping_power(energy)))


def bremsstrahlung_per_path(
    electron_kev: NDArray[np.float64], photon_kev: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Photons per keV and per g/cm2 of an electron's path, over all directions.

    Source: S. M. Seltzer, M. J. Berger, At. Data Nucl. Data Tables 35 (1986) 345,
    eq. 1, spline between table points; held below 10 keV.
    """
    tau = electron_kev / ELECTRON_REST_KEV
    beta2 = tau * (tau + 2.0) / (tau + 1.0) ** 2
    scaled = _scaled_cross_section().ev(np.log(electron_kev), photon_kev / electron_kev)
    charge2 = atomic_number(ELEMENT) ** 2
    per_atom = 1e-27 * scaled * charge2 / (beta2 * photon_kev)
    return np.asarray(AVOGADRO_PER_MOL / atomic_mass(ELEMENT) * per_atom)


def towards_window(
    voltage_kv: float, electron_kev: NDArray[np.float64], anode_angle_deg: float
) -> NDArray[np.float64]:
    """Radiation into the beam's direction, over that of isotropic radiation.

    Notes
    -----
    Isotropic for the moving electron, so beamed forward for the target, to fourth
    order in Legendre polynomials, averaged over the electrons' directions. It matters
    within some 10 % of the end point, where electrons still fly straight. The weaker
    polarisation of the true pattern is left out.
    Source: Lorentz transformation of a solid angle; the averaging over directions
    follows A. Omar, P. Andreo, G. Poludniowski, Med. Phys. 47 (2020) 4763.
    """
    cosine = -np.sin(np.deg2rad(anode_angle_deg))
    tau = electron_kev / ELECTRON_REST_KEV
    beta = np.sqrt(tau * (tau + 2.0)) / (tau + 1.0)
    beamed = _beaming()(beta)
    u, log_start = electron_kev / voltage_kv, np.log(voltage_kv)
    pattern = np.ones_like(electron_kev)
    for order, electrons in enumerate(_directions()):
        seen = Legendre.basis(order + 1)(cosine)
        pattern += beamed[..., order] * electrons.ev(log_start, u) * seen
    return pattern


def escape(
    voltage_kv: float,
    electron_kev: NDArray[np.float64],
    depths_of_absorption: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Mean share of photons that leave, times path over that of steady slowing down.

    Parameters
    ----------
    voltage_kv : float
        Start energy of the electrons.
    electron_kev : array
        Energy at which they radiate.
    depths_of_absorption : array, broadcast with `electron_kev`
        mu * path_length / sin(anode angle): how often the electrons' unbent path
        would absorb the photon.

    Notes
    -----
    Laplace transform of a gamma law with the mean and variance of the depth.
    """
    u, log_start = electron_kev / voltage_kv, np.log(voltage_kv)
    path, depth, shape = (curve.ev(log_start, u) for curve in _depths())
    return np.asarray(path * (1.0 + depths_of_absorption * depth / shape) ** -shape)


def tungsten_attenuation(energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mass attenuation coefficient of tungsten in cm2/g, quick to evaluate.

    Linear in log-log between 1500 tabulated energies, with both sides of each edge.
    """
    log_kev, log_value = _attenuation_table()
    return np.asarray(np.exp(np.interp(np.log(energy_kev), log_kev, log_value)))


@cache
def _scaled_cross_section() -> RectBivariateSpline:
    return RectBivariateSpline(
        np.log(tables.BREMSSTRAHLUNG_KEV),
        tables.BREMSSTRAHLUNG_FRACTION,
        tables.BREMSSTRAHLUNG_MB,
    )


@cache
def _depths() -> tuple[RectBivariateSpline, ...]:
    """Path, mean depth and shape against (ln start energy, u)."""
    return tuple(
        _over_start_and_u(table)
        for table in (
            tables.ELECTRON_PATH,
            tables.ELECTRON_DEPTH,
            tables.ELECTRON_SHAPE,
        )
    )


@cache
def _directions() -> tuple[RectBivariateSpline, ...]:
    """Legendre means of the electrons' directions against (ln start energy, u)."""
    return tuple(_over_start_and_u(table) for table in tables.ELECTRON_LEGENDRE)


def _over_start_and_u(table: NDArray[np.float64]) -> RectBivariateSpline:
    borders = tables.ELECTRON_U_BORDERS
    return RectBivariateSpline(
        np.log(tables.ELECTRON_START_KEV),
        0.5 * (borders[1:] + borders[:-1]),
        table,
        kx=2,
        ky=2,
    )


@cache
def _beaming() -> CubicSpline:
    """Legendre coefficients 1 to 4 of the beamed pattern against beta."""
    beta = np.linspace(0.0, 0.8, 33)
    cosine, weight = leggauss(32)
    pattern = (1.0 - beta**2) / (1.0 - np.outer(cosine, beta)) ** 2
    moments = [
        (order + 0.5) * (weight * Legendre.basis(order)(cosine)) @ pattern
        for order in range(1, 5)
    ]
    return CubicSpline(beta, np.stack(moments, axis=-1))


@cache
def _attenuation_table() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    # Edges found where the coefficient rises: both sides are then tabulated.
    coarse = np.geomspace(LOWEST_KEV, HIGHEST_KEV, 1500)
    value = mass_attenuation({ELEMENT: 1.0}, coarse)
    rises = np.flatnonzero(np.diff(value) > 0.0)
    brackets = [_bracket_edge(coarse[i], coarse[i + 1]) for i in rises]
    energy = np.unique(np.concatenate([coarse, np.ravel(brackets)]))
    return np.log(energy), np.log(mass_attenuation({ELEMENT: 1.0}, energy))


def _bracket_edge(low: float, high: float) -> tuple[float, float]:
    """Two energies 1e-6 keV apart with the edge between them."""
    start = mass_attenuation({ELEMENT: 1.0}, low)
    while high - low > 1e-6:
        middle = 0.5 * (low + high)
        if mass_attenuation({ELEMENT: 1.0}, middle) > start:
            high = middle
        else:
            low = middle
    return low, high
