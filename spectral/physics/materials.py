"""Materials: what they are made of, and how dense they are."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

from spectral.errors import InputError
from spectral.physics.compositions import COMPOSITIONS
from spectral.physics.cross_sections import (
    Process,
    atomic_mass,
    checked_element,
    element_density,
    mass_attenuation,
    parse_formula,
)

if TYPE_CHECKING:
    from collections.abc import Mapping

    import numpy as np
    from numpy.typing import ArrayLike, NDArray

_FRACTION_TOLERANCE = 2e-3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Material:
    """A material by its elements.

    Attributes
    ----------
    name : str
        As the user calls it.
    weight_fractions : mapping of element symbol to weight fraction
        Sums to 1.
    density_g_cm3 : float
        In g/cm3.
    source : str
        Where composition and density come from; "" if the caller gave them.
    """

    name: str
    weight_fractions: Mapping[str, float]
    density_g_cm3: float
    source: str = ""

    def __post_init__(self) -> None:
        """Check the density and the fractions."""
        if not 0.0 < self.density_g_cm3 < math.inf:
            msg = (
                f"material {self.name!r} has density {self.density_g_cm3!r} g/cm3: "
                "it must be positive"
            )
            raise InputError(msg)
        whole = sum(self.weight_fractions.values())
        if not self.weight_fractions or not abs(whole - 1.0) < 1e-9:
            msg = f"weight fractions of {self.name!r} sum to {whole:g}, not to 1"
            raise InputError(msg)

    def mass_attenuation(
        self, energy_kev: ArrayLike, *, process: Process = "total"
    ) -> NDArray[np.float64]:
        """Mass attenuation coefficient in cm2/g, in the shape of `energy_kev`."""
        return mass_attenuation(self.weight_fractions, energy_kev, process=process)

    def areal_density(self, thickness_mm: float) -> float:
        """Areal density in g/cm2 of a plate, from its thickness in mm."""
        return self.density_g_cm3 * thickness_mm / 10.0


def find_material(text: str, *, density_g_cm3: float | None = None) -> Material:
    """Material from a name of the table or from a chemical formula.

    Parameters
    ----------
    text : str
        A name (case, spaces and hyphens do not matter), an element symbol or a
        formula.
    density_g_cm3 : float, optional
        In g/cm3; replaces the table's. Required for the formula of a compound that
        is not in the table.

    Returns
    -------
    Material

    Raises
    ------
    InputError
        If the text is neither a known name nor a formula, or a density is missing.

    Examples
    --------
    >>> find_material("PMMA").density_g_cm3
    1.19
    >>> find_material("CaCO3", density_g_cm3=2.71).weight_fractions["Ca"].__round__(3)
    0.4
    """
    key = _table_key(text.strip())
    if key is None:
        return _unlisted(text.strip(), density_g_cm3)
    entry = COMPOSITIONS[key]
    density = entry.density_g_cm3 if density_g_cm3 is None else density_g_cm3
    fractions = entry.weight_fractions or formula_weight_fractions(entry.formula)
    whole = sum(fractions.values())
    return Material(
        name=key,
        weight_fractions={e: w / whole for e, w in fractions.items()},
        density_g_cm3=float(density),
        source=entry.source,
    )


def material_from_formula(
    formula: str, density_g_cm3: float, *, name: str | None = None
) -> Material:
    """Material of a chemical formula, with the caller's density in g/cm3."""
    return Material(
        name=formula if name is None else name,
        weight_fractions=formula_weight_fractions(formula),
        density_g_cm3=float(density_g_cm3),
    )


def material_from_weight_fractions(
    name: str, weight_fractions: Mapping[str, float], density_g_cm3: float
) -> Material:
    """Material from weight fractions, which are brought to an exact sum of 1.

    Raises
    ------
    InputError
        If a symbol is unknown, a fraction is not positive, or their sum is further
        than 0.002 from 1.
    """
    for element, fraction in weight_fractions.items():
        checked_element(element)
        if not 0.0 < fraction < math.inf:
            msg = f"weight fraction of {element} in {name!r} is {fraction!r}"
            raise InputError(msg)
    whole = sum(weight_fractions.values())
    if not abs(whole - 1.0) <= _FRACTION_TOLERANCE:
        msg = f"weight fractions of {name!r} sum to {whole:g}, not to 1"
        raise InputError(msg)
    return Material(
        name=name,
        weight_fractions={e: w / whole for e, w in weight_fractions.items()},
        density_g_cm3=float(density_g_cm3),
    )


def formula_weight_fractions(formula: str) -> dict[str, float]:
    """Weight fraction of each element in a chemical formula."""
    atoms = parse_formula(formula)
    grams = {element: n * atomic_mass(element) for element, n in atoms.items()}
    whole = sum(grams.values())
    return {element: mass / whole for element, mass in grams.items()}


def known_materials() -> tuple[str, ...]:
    """Names of the table, in its order."""
    return tuple(COMPOSITIONS)


def _unlisted(formula: str, density_g_cm3: float | None) -> Material:
    try:
        fractions = formula_weight_fractions(formula)
    except InputError as error:
        msg = (
            f"{formula!r} is neither a chemical formula nor a known material: "
            f"known are {', '.join(known_materials())}"
        )
        raise InputError(msg) from error
    if density_g_cm3 is not None:
        return material_from_formula(formula, density_g_cm3)
    if len(fractions) > 1:
        msg = f"material {formula!r} is not in the table: give its density in g/cm3"
        raise InputError(msg)
    return Material(
        name=formula,
        weight_fractions=fractions,
        density_g_cm3=element_density(next(iter(fractions))),
        source="density of the pure element as distributed with xraydb",
    )


def _table_key(text: str) -> str | None:
    """Key of the table, or None if the text must be read as a formula.

    A word spelled as a compound's formula stays one ("TiN" is not tin), unless the
    table spells a name just so ("CdTe").
    """
    if text in _spelled():
        return _spelled()[text]
    try:
        compound = len(parse_formula(text)) > 1
    except InputError:
        compound = False
    return None if compound else _names().get(_plain(text))


def _plain(name: str) -> str:
    """Name without case, spaces, hyphens and underscores."""
    return name.casefold().replace(" ", "").replace("-", "").replace("_", "")


@cache
def _spelled() -> dict[str, str]:
    """Name, alias or element symbol, spelled exactly, to key of the table."""
    words = {
        word: key
        for key, entry in COMPOSITIONS.items()
        for word in (key, *entry.aliases)
    }
    elements = {
        entry.formula: key
        for key, entry in COMPOSITIONS.items()
        if entry.formula and len(parse_formula(entry.formula)) == 1
    }
    return words | elements


@cache
def _names() -> dict[str, str]:
    """Plain name or alias to key of the table."""
    return {
        _plain(word): key
        for key, entry in COMPOSITIONS.items()
        for word in (key, *entry.aliases)
    }
