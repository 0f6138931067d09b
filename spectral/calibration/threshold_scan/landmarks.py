"""Known energies that a threshold scan can show, and how sharply."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from spectral.errors import InputError
from spectral.physics.cross_sections import k_edge_kev, k_lines

if TYPE_CHECKING:
    from spectral.scans.threshold_scan import LineSource

LINE, EDGE, END = 0, 1, 2
"""How often the density of photons must be integrated until it jumps: a line makes
the counts step, a K edge makes their slope step, a tube's end their curvature."""

NUCLIDE_LINES: dict[str, tuple[tuple[float, float], ...]] = {
    "Am-241": ((59.5409, 0.359),),
}
"""Gamma line in keV and photons per decay.

Source: 59.5409 keV, R. G. Helmer, C. van der Leun, Nucl. Instrum. Methods A 450 (2000)
35 (from memory); intensity from memory.
"""
BETA_RATIO = 1.04
"""A K line this much above the strongest one belongs to the K-beta group: K-alpha1 and
K-alpha2 are closer, and K-beta further, from Ca upwards."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Landmark:
    """A feature of known energy in a counting curve.

    Attributes
    ----------
    name : str
        What a person calls it ("Sn K-alpha").
    order : int
        `LINE`, `EDGE` or `END`.
    energy_kev : float, in keV
        For a pair of lines that the noise cannot part, their mean by intensity.
    companions : tuple of (keV, share)
        Lines nearby: distance above the landmark, and photons per photon of it.
    """

    name: str
    order: int
    energy_kev: float
    companions: tuple[tuple[float, float], ...] = ()


def landmark_of(source: LineSource) -> Landmark:
    """The landmark of a source.

    Raises
    ------
    InputError
        If the nuclide is unknown, or the element has no K line in the tables.

    Examples
    --------
    >>> from spectral.scans.threshold_scan import LineSource
    >>> mark = landmark_of(LineSource(kind="fluorescence target", emitter="Sn"))
    >>> mark.name, round(mark.energy_kev, 2)
    ('Sn K-alpha', 25.19)
    """
    if source.kind == "fluorescence target":
        return _k_alpha(source.emitter)
    if source.kind == "radionuclide":
        if source.emitter not in NUCLIDE_LINES:
            msg = (
                f"nuclide {source.emitter!r} is unknown: known are "
                f"{', '.join(NUCLIDE_LINES)}"
            )
            raise InputError(msg)
        energy = NUCLIDE_LINES[source.emitter][0][0]
        return Landmark(name=f"{source.emitter} gamma", order=LINE, energy_kev=energy)
    if source.kind == "edge filter":
        return Landmark(
            name=f"{source.emitter} K edge",
            order=EDGE,
            energy_kev=k_edge_kev(source.emitter),
        )
    voltage = float(source.voltage_kv or 0.0)
    return Landmark(name=f"{voltage:g} kV end", order=END, energy_kev=voltage)


def _k_alpha(element: str) -> Landmark:
    """Mean of the K-alpha pair, with the mean of the K-beta lines beside it."""
    lines = k_lines(element)
    limit = BETA_RATIO * lines[0][0]
    alpha = [(e, share) for e, share in lines if e <= limit]
    beta = [(e, share) for e, share in lines if e > limit]
    energy, weight = _mean(alpha)
    companions = []
    if beta:
        other, share = _mean(beta)
        companions.append((other - energy, share / weight))
    return Landmark(
        name=f"{element} K-alpha",
        order=LINE,
        energy_kev=energy,
        companions=tuple(companions),
    )


def _mean(lines: list[tuple[float, float]]) -> tuple[float, float]:
    """Mean energy and total share of some lines."""
    weight = sum(share for _, share in lines)
    return sum(energy * share for energy, share in lines) / weight, weight
