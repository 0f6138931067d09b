"""K fluorescence of the sensor's own elements: emission and escape."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.physics import cross_sections

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FluorescenceLine:
    """One K line of a sensor's element.

    Attributes
    ----------
    element : str
    energy_kev : float
    per_photoabsorption : array, shape (energy,)
        Mean number of line photons per photoelectric absorption in the sensor.
    """

    element: str
    energy_kev: float
    per_photoabsorption: NDArray[np.float64]


def fluorescence_lines(
    weight_fractions: Mapping[str, float],
    energy_kev: NDArray[np.float64],
    *,
    least_kev: float = 5.0,
) -> tuple[FluorescenceLine, ...]:
    """K lines that a compound emits after photoelectric absorption.

    Parameters
    ----------
    weight_fractions : mapping of element to weight fraction
    energy_kev : array, shape (energy,), in keV
    least_kev : float
        Lines below this energy are absorbed where they start and left out.

    Returns
    -------
    tuple of FluorescenceLine
        K-alpha and K-beta grouped, for each element whose lines exceed the limit.

    Notes
    -----
    Emission per absorption: w_Z tau_Z / tau * (1 - 1/J_K) * omega_K * line share.
    Source: J_K, omega_K and line shares as `spectral.physics.cross_sections`; the
    product form is textbook (X-ray fluorescence fundamental parameters).
    """
    tau = cross_sections.mass_attenuation(weight_fractions, energy_kev, process="photo")
    lines: list[FluorescenceLine] = []
    for element, fraction in weight_fractions.items():
        edge = cross_sections.k_edge_kev(element)
        if edge < least_kev:
            continue
        own = cross_sections.mass_attenuation(
            {element: 1.0}, energy_kev, process="photo"
        )
        shell = 1.0 - 1.0 / cross_sections.k_jump_ratio(element)
        emitted = np.where(
            energy_kev > edge,
            fraction * own / tau * shell * cross_sections.k_fluorescence_yield(element),
            0.0,
        )
        for line_kev, share in _grouped(cross_sections.k_lines(element)):
            if line_kev >= least_kev:
                lines.append(
                    FluorescenceLine(
                        element=element,
                        energy_kev=line_kev,
                        per_photoabsorption=emitted * share,
                    )
                )
    return tuple(lines)


def _grouped(
    lines: tuple[tuple[float, float], ...],
) -> tuple[tuple[float, float], ...]:
    """K-alpha and K-beta as two lines at their mean energies."""
    strongest = max(lines, key=lambda line: line[1])[0]
    groups: list[tuple[float, float]] = []
    for members in (
        [line for line in lines if line[0] <= 1.04 * strongest],
        [line for line in lines if line[0] > 1.04 * strongest],
    ):
        share = sum(part for _, part in members)
        if share > 0.0:
            mean = sum(energy * part for energy, part in members) / share
            groups.append((mean, share))
    total = sum(share for _, share in groups)
    return tuple((energy, share / total) for energy, share in groups)


def front_escape_probability(mu_line: float, mu_primary: float) -> float:
    """Probability that an emitted line leaves a thick sensor through its front.

    Parameters
    ----------
    mu_line, mu_primary : float, in one common unit
        Attenuation of the sensor at the line and at the incoming photon.

    Notes
    -----
    (1/2) [1 - (mu_f/mu_0) ln(1 + mu_0/mu_f)] for normal incidence on a
    half-space. Source: P. Axel, Rev. Sci. Instrum. 25 (1954) 391 (from memory).
    """
    ratio = mu_line / mu_primary
    return float(0.5 * (1.0 - ratio * np.log1p(1.0 / ratio)))
