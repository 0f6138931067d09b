"""Electrons in a thick tungsten target: slowing down, radiation, escape of photons."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from scipy.interpolate import CubicSpline, PchipInterpolator, RectBivariateSpline

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
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(20)


def stopping_power(electron_kev: ArrayLike) -> NDArray[np.float64]:
    """Collision stopping power of tungsten for electrons, in keV cm2/g.

    Notes
    -----
    Bethe's formula with Moller scattering and no density effect (under 1 % below
    200 keV); too low under some 5 keV.
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
    u: NDArray[np.float64],
    electron_kev: NDArray[np.float64],
    photon_kev: NDArray[np.float64],
    anode_angle_deg: float,
) -> NDArray[np.float64]:
    """Radiation into the beam's direction, over that of isotropic radiation.

    Notes
    -----
    Dipole pattern seen from a moving electron: a share 1 - k/T of transverse, k/T of
    longitudinal acceleration (our interpolation between the soft and the tip limit),
    to second order in Legendre polynomials and averaged over the electrons'
    directions. It matters only near the tip, where electrons still fly straight.
    Source: form of E. Acosta, X. Llovet, F. Salvat, Appl. Phys. Lett. 80 (2002) 3228.
    """
    cosine = -np.sin(np.deg2rad(anode_angle_deg))
    second = 0.5 * (3.0 * cosine**2 - 1.0)
    p1, p2 = _legendre_of_electrons()
    tau = electron_kev / ELECTRON_REST_KEV
    beta = np.sqrt(tau * (tau + 2.0)) / (tau + 1.0)
    share = photon_kev / electron_kev
    across, along = _dipole_moments()
    mix = share[..., None]
    moments = (1.0 - mix) * across(beta) + mix * along(beta)
    pattern = moments[..., 0] * p1(u) * cosine + moments[..., 1] * p2(u) * second
    return np.asarray(1.0 + pattern)


def escape(
    u: NDArray[np.float64], depths_of_absorption: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Mean share of photons that leave, times the share of electrons still inside.

    Parameters
    ----------
    u : array
        Electron energy over start energy, 0.1 to 1.
    depths_of_absorption : array, broadcast with `u`
        mu * path_length / sin(anode angle): how often the electrons' path would
        absorb the photon.

    Notes
    -----
    Laplace transform of a gamma law with the mean and variance of the depth.
    """
    remaining, depth, shape = _electron_depths()
    k = shape(u)
    return np.asarray(remaining(u) * (1.0 + depths_of_absorption * depth(u) / k) ** -k)


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
def _electron_depths() -> tuple[
    PchipInterpolator, PchipInterpolator, PchipInterpolator
]:
    return (
        PchipInterpolator(tables.ELECTRON_U, tables.ELECTRON_REMAINING),
        PchipInterpolator(tables.ELECTRON_U, tables.ELECTRON_DEPTH),
        PchipInterpolator(tables.ELECTRON_U, tables.ELECTRON_SHAPE),
    )


@cache
def _legendre_of_electrons() -> tuple[PchipInterpolator, PchipInterpolator]:
    return (
        PchipInterpolator(tables.ELECTRON_U, tables.ELECTRON_P1),
        PchipInterpolator(tables.ELECTRON_U, tables.ELECTRON_P2),
    )


@cache
def _dipole_moments() -> tuple[CubicSpline, CubicSpline]:
    """First and second Legendre coefficients against beta, across and along."""
    beta = np.linspace(0.0, 0.8, 33)
    cosine, weight = np.polynomial.legendre.leggauss(32)
    doppler = (1.0 - beta**2) / (1.0 - np.outer(cosine, beta)) ** 2
    own = (cosine[:, None] - beta) / (1.0 - np.outer(cosine, beta))
    curves = []
    for dipole in (0.75 * (1.0 + own**2), 1.5 * (1.0 - own**2)):
        pattern = 0.5 * weight[:, None] * doppler * dipole
        first = 3.0 * np.sum(pattern * cosine[:, None], axis=0)
        second = 5.0 * np.sum(pattern * (1.5 * cosine**2 - 0.5)[:, None], axis=0)
        curves.append(CubicSpline(beta, np.stack([first, second], axis=-1)))
    return curves[0], curves[1]


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
