"""Photon cross sections, K edges and K lines of the elements.

The only module that imports xraydb. Everything here is in keV and cm2/g, raises
outside the tables instead of holding their end value, and leaves the caller's
arrays alone.

Source: W. T. Elam, B. D. Ravel, J. R. Sieber, Radiat. Phys. Chem. 63 (2002) 121-128
(the tables), as distributed with xraydb.
"""

from __future__ import annotations

from functools import cache, lru_cache
from typing import TYPE_CHECKING, Literal

import numpy as np
import xraydb

from spectral.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import ArrayLike, NDArray

Process = Literal["total", "photo", "coherent", "incoherent"]

PROCESSES: tuple[Process, ...] = ("total", "photo", "coherent", "incoherent")
LOWEST_KEV = 1.0
HIGHEST_KEV = 800.0
# Lines weaker than this share of the K series are left out of `k_lines`.
_WEAKEST_LINE = 0.01
_TABLE_WORD = {"photo": "photo", "coherent": "coh", "incoherent": "incoh"}


def mass_attenuation(
    weight_fractions: Mapping[str, float],
    energy_kev: ArrayLike,
    *,
    process: Process = "total",
) -> NDArray[np.float64]:
    """Mass attenuation coefficient of a mixture, in cm2/g.

    Parameters
    ----------
    weight_fractions : mapping of element symbol to weight fraction
        Taken as they stand: a mapping that sums to 0.5 gives half the value.
    energy_kev : array, any shape and real dtype, in keV
        Photon energies, 1 to 800 keV.
    process : {"total", "photo", "coherent", "incoherent"}
        The sum of all, or one of them.

    Returns
    -------
    array, shape of `energy_kev`, in cm2/g
        Sum over the elements (mixture rule). Within 2 eV of an absorption edge, it
        depends on the element which side is given.

    Raises
    ------
    InputError
        If an element or process is unknown, or an energy is outside the tables.

    Notes
    -----
    Binding in the compound and fine structure above an edge are left out.
    Source: J. H. Hubbell, S. M. Seltzer, NISTIR 5632 (1995), eq. 6 (mixture rule).

    Examples
    --------
    >>> mass_attenuation({"H": 0.111894, "O": 0.888106}, [60]).round(4)
    array([0.2059])
    """
    if process not in PROCESSES:
        msg = f"process {process!r} is unknown: use one of {', '.join(PROCESSES)}"
        raise InputError(msg)
    energy = np.array(energy_kev, dtype=np.float64, order="C")
    inside = (energy >= LOWEST_KEV) & (energy <= HIGHEST_KEV)
    if not inside.all():
        worst = energy[~inside].flat[0]
        msg = (
            f"energy {worst:g} keV is outside the cross-section tables "
            f"({LOWEST_KEV:g} to {HIGHEST_KEV:g} keV)"
        )
        raise InputError(msg)
    key = energy.tobytes()
    total = np.zeros(energy.size)
    for element, fraction in weight_fractions.items():
        total += float(fraction) * _of_element(checked_element(element), process, key)
    return total.reshape(energy.shape)


@cache
def k_edge_kev(element: str) -> float:
    """Binding energy of the K shell, in keV."""
    return float(_k_edge(element).energy) / 1000.0


@cache
def k_jump_ratio(element: str) -> float:
    """Photoelectric cross section just above the K edge over just below it.

    The share of photoelectric events in the K shell, above the edge, is
    ``1 - 1 / k_jump_ratio``; it changes slowly with energy and is taken as constant.
    """
    return float(_k_edge(element).jump_ratio)


@cache
def k_fluorescence_yield(element: str) -> float:
    """Probability that a K vacancy emits a K photon.

    Notes
    -----
    Tables of different authors differ by 1-4 % from Cd upwards and by 4-15 % for Si,
    Ga and As: take the difference as the accuracy.
    """
    return float(_k_edge(element).fyield)


@cache
def k_lines(element: str) -> tuple[tuple[float, float], ...]:
    """Energies (keV) and shares of the K lines, strongest first; the shares sum to 1.

    Lines under 1 % of the series are left out. K-alpha1 comes first, then K-alpha2
    and the K-beta lines.

    Raises
    ------
    InputError
        If the element is unknown or has no K lines in the table (H, He, Li).
    """
    found = xraydb.xray_lines(checked_element(element), initial_level="K")
    series = sorted(
        ((line.intensity, line.energy / 1000.0) for line in found.values()),
        reverse=True,
    )
    strong = [(share, energy) for share, energy in series if share >= _WEAKEST_LINE]
    if not strong:
        msg = f"element {element} has no K lines in the table"
        raise InputError(msg)
    whole = sum(share for share, _ in strong)
    return tuple((float(energy), float(share / whole)) for share, energy in strong)


@cache
def atomic_mass(element: str) -> float:
    """Standard atomic mass, in g/mol."""
    return float(xraydb.atomic_mass(checked_element(element)))


@cache
def atomic_number(element: str) -> int:
    """Number of protons."""
    return int(xraydb.atomic_number(checked_element(element)))


@cache
def element_density(element: str) -> float:
    """Density of the pure element near room temperature, in g/cm3."""
    return float(xraydb.atomic_density(checked_element(element)))


def parse_formula(formula: str) -> dict[str, float]:
    """Number of atoms of each element in a chemical formula.

    Raises
    ------
    InputError
        If the text is empty or is no formula.

    Examples
    --------
    >>> parse_formula("Cd0.9Zn0.1Te") == {"Cd": 0.9, "Zn": 0.1, "Te": 1.0}
    True
    """
    try:
        atoms = xraydb.chemparse(formula.strip())
    except (ValueError, KeyError, IndexError) as error:
        msg = f"{formula!r} is not a chemical formula"
        raise InputError(msg) from error
    counts = {str(symbol): float(number) for symbol, number in atoms.items()}
    if not counts or any(not 0.0 < number < np.inf for number in counts.values()):
        msg = f"{formula!r} is not a chemical formula"
        raise InputError(msg)
    for symbol in counts:
        checked_element(symbol)
    return counts


@cache
def checked_element(element: str) -> str:
    """The symbol itself, if the cross-section tables hold that element (Z 1 to 98).

    Raises
    ------
    InputError
        If they do not.
    """
    # xraydb also takes names and lower-case symbols; one spelling is enough here.
    if element not in _symbols():
        msg = f"{element!r} is not an element symbol of the cross-section tables"
        raise InputError(msg)
    return element


@cache
def table_source() -> str:
    """The tables and their version, as a report should name them."""
    version = " ".join(str(xraydb.get_xraydb().get_version()).split())
    return (
        "Elam, Ravel & Sieber, Radiat. Phys. Chem. 63 (2002) 121; "
        + version.replace("XrayDB Version:", "xraydb data").replace(
            "Python Version:", "package"
        )
    )


@cache
def _symbols() -> frozenset[str]:
    return frozenset(xraydb.atomic_symbol(number) for number in range(1, 99))


@cache
def _k_edge(element: str) -> xraydb.XrayEdge:
    edge = xraydb.xray_edge(checked_element(element), "K")
    if edge is None:
        msg = f"element {element} has no K edge in the table"
        raise InputError(msg)
    return edge


@lru_cache(maxsize=512)
def _of_element(element: str, process: Process, energies: bytes) -> NDArray[np.float64]:
    """Table values of one element; the key is the energies' bytes (keV, float64)."""
    if process == "total":
        parts = [_of_element(element, part, energies) for part in PROCESSES[1:]]
        total: NDArray[np.float64] = np.sum(parts, axis=0)
        return total
    energy_ev = np.frombuffer(energies, dtype=np.float64) * 1000.0
    if energy_ev.size == 0:
        return np.zeros(0)
    # Rounding may put 800 keV a hair above the table's 8e5 eV.
    energy_ev = np.minimum(energy_ev, HIGHEST_KEV * 1000.0)
    values = xraydb.get_xraydb().cross_section_elam(
        element, energy_ev, kind=_TABLE_WORD[process]
    )
    return np.asarray(values, dtype=np.float64)
