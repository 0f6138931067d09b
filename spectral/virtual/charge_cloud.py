"""Size of a charge cloud by its energy and the way it drifts."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.physics.cross_sections import atomic_mass, atomic_number

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

ELEMENTARY_CHARGE_C = 1.602176634e-19
"""Exact by definition of the SI (2019)."""
BOLTZMANN_EV_PER_K = 8.617333262e-5
"""Exact by definition of the SI (2019), rounded."""
VACUUM_PERMITTIVITY_F_PER_UM = 8.8541878e-18
"""CODATA 2018, rounded."""


def electron_range_um(
    weight_fractions: Mapping[str, float],
    density_g_cm3: float,
    energy_kev: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Range of an electron, in um, in the shape of ``energy_kev``.

    Notes
    -----
    0.0276 A E^1.67 / (Z^0.89 rho) with A and Z averaged by weight; tens of percent
    off for compounds, which matters little for the cloud's size.
    Source: K. Kanaya, S. Okayama, J. Phys. D 5 (1972) 43, from memory.
    """
    mass = sum(w * atomic_mass(element) for element, w in weight_fractions.items())
    number = sum(w * atomic_number(element) for element, w in weight_fractions.items())
    factor = 0.0276 * mass / (number**0.89 * density_g_cm3)
    return np.asarray(factor * energy_kev**1.67)


def cloud_size_um(
    start_um: NDArray[np.float64],
    charge_c: NDArray[np.float64],
    drift_um: NDArray[np.float64],
    *,
    field_v_per_um: float,
    temperature_k: float,
    relative_permittivity: float,
) -> NDArray[np.float64]:
    r"""Standard deviation of drifting charge clouds on one axis, in um.

    Parameters
    ----------
    start_um : array, shape (cloud,), in um
        Standard deviation where the drift starts; above 0.
    charge_c : array, shape (cloud,), in C
    drift_um : array, shape (drift,), in um
        Rising from 0.
    field_v_per_um : float
        Uniform drift field.
    temperature_k, relative_permittivity : float

    Returns
    -------
    array, shape (cloud, drift)

    Notes
    -----
    Diffusion and the cloud's own repulsion:
    :math:`d\sigma^2/dh = 2 (kT/q)/F + Q / (12 \pi^{3/2} \varepsilon F \sigma)`; the
    second term follows from the virial of the electrostatic energy
    :math:`Q^2 / (8 \pi^{3/2} \varepsilon \sigma)` of a Gaussian cloud that keeps its
    form. Mobility cancels. Integrated with the classical Runge-Kutta rule.
    Source: E. Gatti, A. Longoni, P. Rehak, M. Sampietro, Nucl. Instrum. Methods A 253
    (1987) 393 (same form, from memory); derived here.
    """
    diffusion = 2.0 * BOLTZMANN_EV_PER_K * temperature_k / field_v_per_um
    permittivity = relative_permittivity * VACUUM_PERMITTIVITY_F_PER_UM
    repulsion = charge_c / (12.0 * np.pi**1.5 * permittivity * field_v_per_um)

    def growth(variance: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(diffusion + repulsion / np.sqrt(variance))

    variance = np.asarray(start_um, dtype=np.float64) ** 2
    sizes = np.empty((variance.size, drift_um.size))
    sizes[:, 0] = np.sqrt(variance)
    for j, step in enumerate(np.diff(drift_um), start=1):
        first = growth(variance)
        second = growth(variance + 0.5 * step * first)
        third = growth(variance + 0.5 * step * second)
        fourth = growth(variance + step * third)
        variance = variance + step * (first + 2 * second + 2 * third + fourth) / 6.0
        sizes[:, j] = np.sqrt(variance)
    return sizes
