"""Table of materials that people name without a formula.

Weight fractions and densities are typical values: a scan's own density always goes
before the one listed here.
"""

from __future__ import annotations

from typing import NamedTuple


class Composition(NamedTuple):
    """What the table holds of one material.

    Attributes
    ----------
    aliases : tuple of str
        Other names people use.
    formula : str
        Chemical formula, or "" if `weight_fractions` is given.
    weight_fractions : dict of str to float
        Element symbol to weight fraction, or empty if `formula` is given.
    density_g_cm3 : float
        In g/cm3.
    source : str
        Where composition and density come from.
    """

    aliases: tuple[str, ...]
    formula: str
    weight_fractions: dict[str, float]
    density_g_cm3: float
    source: str


_SRD_126 = (
    "J. H. Hubbell, S. M. Seltzer, NIST SRD 126 (2004), tables 1 and 2, from memory"
)
_ESTAR = "NIST SRD 124 (ESTAR), material list, from memory"
_ICRU_44 = (
    "ICRU Report 44 (1989), as listed in NIST SRD 126 (2004), table 2, from memory"
)
_PNNL = (
    "R. J. McConn et al., PNNL-15870 rev. 1, Richland (2011), from memory; a typical "
    "composition inside the standard's limits"
)
_LATTICE = "density from the zinc-blende lattice constant {}, from memory"

COMPOSITIONS: dict[str, Composition] = {
    # Liquids and polymers
    "water": Composition(("H2O",), "", {"H": 0.111894, "O": 0.888106}, 1.0, _SRD_126),
    "PMMA": Composition(
        ("acrylic", "polymethyl methacrylate"),
        "",
        {"H": 0.080541, "C": 0.599846, "O": 0.319613},
        1.19,
        _SRD_126,
    ),
    "polyethylene": Composition(
        ("PE",), "", {"H": 0.143716, "C": 0.856284}, 0.93, _SRD_126
    ),
    "polypropylene": Composition(("PP",), "C3H6", {}, 0.90, _ESTAR),
    "POM": Composition(
        ("polyoxymethylene", "acetal"),
        "CH2O",
        {},
        1.425,
        _ESTAR,
    ),
    "nylon": Composition(
        ("nylon 6", "nylon 66", "nylon 6/6", "PA6", "PA66", "polyamide"),
        "C6H11NO",
        {},
        1.14,
        _ESTAR,
    ),
    "PTFE": Composition(("polytetrafluoroethylene",), "C2F4", {}, 2.2, _ESTAR),
    # Tissue substitutes
    "soft tissue": Composition(
        ("ICRU-44 soft tissue", "soft tissue ICRU-44"),
        "",
        {
            "H": 0.102,
            "C": 0.143,
            "N": 0.034,
            "O": 0.708,
            "Na": 0.002,
            "P": 0.003,
            "S": 0.003,
            "Cl": 0.002,
            "K": 0.003,
        },
        1.06,
        _ICRU_44,
    ),
    "adipose": Composition(
        ("adipose tissue", "ICRU-44 adipose", "fat"),
        "",
        {
            "H": 0.114,
            "C": 0.598,
            "N": 0.007,
            "O": 0.278,
            "Na": 0.001,
            "S": 0.001,
            "Cl": 0.001,
        },
        0.95,
        _ICRU_44,
    ),
    "cortical bone": Composition(
        ("bone", "ICRU-44 cortical bone", "cortical bone ICRU-44"),
        "",
        {
            "H": 0.034,
            "C": 0.155,
            "N": 0.042,
            "O": 0.435,
            "Na": 0.001,
            "Mg": 0.002,
            "P": 0.103,
            "S": 0.003,
            "Ca": 0.225,
        },
        1.92,
        _ICRU_44,
    ),
    "hydroxyapatite": Composition(
        ("hydroxylapatite", "HAP"),
        "Ca10(PO4)6(OH)2",
        {},
        3.16,
        "stoichiometric; density of the mineral, from memory",
    ),
    # Metals
    "aluminium": Composition(("aluminum",), "Al", {}, 2.699, _SRD_126),
    "titanium": Composition((), "Ti", {}, 4.54, _SRD_126),
    "iron": Composition((), "Fe", {}, 7.874, _SRD_126),
    "copper": Composition((), "Cu", {}, 8.96, _SRD_126),
    "tin": Composition((), "Sn", {}, 7.31, _SRD_126),
    "lead": Composition((), "Pb", {}, 11.35, _SRD_126),
    "stainless steel 304": Composition(
        ("steel 304", "304", "stainless steel", "1.4301", "AISI 304"),
        "",
        {
            "C": 0.0004,
            "Si": 0.005,
            "P": 0.00023,
            "S": 0.00015,
            "Cr": 0.19,
            "Mn": 0.01,
            "Fe": 0.70172,
            "Ni": 0.0925,
        },
        8.0,
        _PNNL,
    ),
    "brass": Composition(
        ("brass 70/30", "CuZn30"),
        "",
        {"Cu": 0.70, "Zn": 0.30},
        8.53,
        "copper alloy CuZn30, nominal; density from memory",
    ),
    # Contrast elements
    "iodine": Composition((), "I", {}, 4.93, _SRD_126),
    "gadolinium": Composition((), "Gd", {}, 7.9, _SRD_126),
    # Sensors
    "silicon": Composition((), "Si", {}, 2.33, _SRD_126),
    "CdTe": Composition(
        ("cadmium telluride",), "CdTe", {}, 5.853, _LATTICE.format("0.6482 nm")
    ),
    "CdZnTe": Composition(
        ("cadmium zinc telluride", "CZT", "Cd0.9Zn0.1Te"),
        "Cd0.9Zn0.1Te",
        {},
        5.840,
        _LATTICE.format("0.6444 nm (Vegard's rule, CdTe 0.6482, ZnTe 0.6104 nm)"),
    ),
    "GaAs": Composition(
        ("gallium arsenide",), "GaAs", {}, 5.317, _LATTICE.format("0.56533 nm")
    ),
}
