"""Tungsten K lines of a tube: by electron impact and by the bremsstrahlung itself."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.physics.cross_sections import (
    atomic_mass,
    k_edge_kev,
    k_fluorescence_yield,
    k_jump_ratio,
    k_lines,
    mass_attenuation,
)
from spectral.physics.tube_target import (
    AVOGADRO_PER_MOL,
    ELECTRON_REST_KEV,
    ELEMENT,
    bremsstrahlung_per_path,
    escape,
    path_length,
    stopping_power,
    tungsten_attenuation,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

_BOHR_CM = 5.29177e-9
_RYDBERG_KEV = 0.01360569
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(20)
_UNIT_NODES, _UNIT_WEIGHTS = 0.5 * (_NODES + 1.0), 0.5 * _WEIGHTS


def line_photons(
    voltage_kv: float, anode_angle_deg: float
) -> list[tuple[float, float]]:
    """Tungsten K lines: energy in keV, photons per electron and steradian.

    Vacancies from electron impact along the slowing down, and from bremsstrahlung
    photons that start into the target and are absorbed there.

    Source: formulas in `k_ionisation` and `_vacancies_by_photons`; yields, shares and
    jump ratio as `spectral.physics.cross_sections`.
    """
    edge = k_edge_kev(ELEMENT)
    if voltage_kv <= edge:
        return [(energy, 0.0) for energy, _ in k_lines(ELEMENT)]
    photons = []
    for energy, share in k_lines(ELEMENT):
        vacancies = _vacancies_by_electrons(
            voltage_kv, anode_angle_deg, energy
        ) + _vacancies_by_photons(voltage_kv, anode_angle_deg, energy)
        per_electron = share * k_fluorescence_yield(ELEMENT) * vacancies
        photons.append((energy, per_electron / (4.0 * np.pi)))
    return photons


def k_ionisation(electron_kev: NDArray[np.float64]) -> NDArray[np.float64]:
    """Cross section for electron impact on the tungsten K shell, in cm2 per atom.

    Source: E. Casnati, A. Tartari, C. Baraldi, J. Phys. B 15 (1982) 155-167, eqs. 6-9
    (equation numbers and constants from memory); relativistic factor of M. Gryzinski,
    Phys. Rev. 138 (1965) A336. The authors give 10 % for 6 <= Z <= 79.
    """
    edge = k_edge_kev(ELEMENT)
    u = electron_kev / edge
    rest = ELECTRON_REST_KEV / edge
    power = -0.0318 + 0.3160 / u - 0.1135 / u**2
    binding = (edge / _RYDBERG_KEV) ** power
    overvoltage = 10.57 * np.exp(-1.736 / u + 0.317 / u**2)
    relativistic = (
        (1.0 + 2.0 * rest)
        / (u + 2.0 * rest)
        * ((u + rest) / (1.0 + rest)) ** 2
        * (
            (1.0 + u)
            * (u + 2.0 * rest)
            * (1.0 + rest) ** 2
            / (rest**2 * (1.0 + 2.0 * rest) + u * (u + 2.0 * rest) * (1.0 + rest) ** 2)
        )
        ** 1.5
    )
    k_electrons = 2.0
    scale = k_electrons * _BOHR_CM**2 * (_RYDBERG_KEV / edge) ** 2
    return np.asarray(scale * binding * overvoltage * relativistic * np.log(u) / u)


def _vacancies_by_electrons(
    voltage_kv: float, anode_angle_deg: float, line_kev: float
) -> float:
    """Vacancies per electron, each weighted by the escape of its line."""
    edge = k_edge_kev(ELEMENT)
    electron = edge + (voltage_kv - edge) * _UNIT_NODES
    step = (voltage_kv - edge) * _UNIT_WEIGHTS
    absorbed = (
        tungsten_attenuation(np.array(line_kev))
        * path_length(voltage_kv)
        / np.sin(np.deg2rad(anode_angle_deg))
    )
    per_kev = (
        AVOGADRO_PER_MOL
        / atomic_mass(ELEMENT)
        * k_ionisation(electron)
        / stopping_power(electron)
    )
    return float(np.sum(step * per_kev * escape(voltage_kv, electron, absorbed)))


def _vacancies_by_photons(
    voltage_kv: float, anode_angle_deg: float, line_kev: float
) -> float:
    r"""Vacancies per electron from absorbed bremsstrahlung, weighted by line escape.

    Notes
    -----
    Half the photons start inwards, from the surface, isotropically; a photon absorbed
    at depth z along a slant path gives a line that escapes with
    :math:`e^{-\mu_L z / \sin\theta}`. Over depth and slant this integrates to
    :math:`\ln(1 + r) / r` with :math:`r = \mu_L / (\mu \sin\theta)`. Scatter is left
    out.
    """
    edge = k_edge_kev(ELEMENT)
    photon = edge + (voltage_kv - edge) * _UNIT_NODES
    photon_step = (voltage_kv - edge) * _UNIT_WEIGHTS
    span = voltage_kv - photon[:, None]
    electron = photon[:, None] + span * _UNIT_NODES
    produced = np.sum(
        span
        * _UNIT_WEIGHTS
        * bremsstrahlung_per_path(
            electron, np.broadcast_to(photon[:, None], span.shape)
        )
        / stopping_power(electron)
        * escape(voltage_kv, electron, np.zeros(1)),
        axis=1,
    )
    attenuation = tungsten_attenuation(photon)
    photo = mass_attenuation({ELEMENT: 1.0}, photon, process="photo") / attenuation
    ratio = (
        tungsten_attenuation(np.array(line_kev))
        / attenuation
        / np.sin(np.deg2rad(anode_angle_deg))
    )
    in_k_shell = 1.0 - 1.0 / k_jump_ratio(ELEMENT)
    weight = 0.5 * in_k_shell * photo * np.log1p(ratio) / ratio
    return float(np.sum(photon_step * produced * weight))
