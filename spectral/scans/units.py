"""Units as files spell them, and their conversion to the ones used here."""

from __future__ import annotations

from typing import TYPE_CHECKING

from spectral.errors import FileFormatError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

_LENGTH = {
    "nm": 1e-6,
    "um": 1e-3,
    "µm": 1e-3,
    "μm": 1e-3,
    "micron": 1e-3,
    "mm": 1.0,
    "cm": 10.0,
    "m": 1000.0,
}
_DENSITY = {
    "g/cm3": 1.0,
    "g/cm^3": 1.0,
    "g/cm**3": 1.0,
    "g.cm-3": 1.0,
    "g cm-3": 1.0,
    "g/cc": 1.0,
    "kg/m3": 1e-3,
    "kg/m^3": 1e-3,
    "kg/m**3": 1e-3,
    "kg.m-3": 1e-3,
    "kg m-3": 1e-3,
}

#: For each unit used here: the spellings a file may use, and their size in it.
SPELLINGS: dict[str, dict[str, float]] = {
    "kV": {"kV": 1.0, "V": 1e-3, "volt": 1e-3, "MV": 1e3},
    "mA": {"mA": 1.0, "uA": 1e-3, "µA": 1e-3, "μA": 1e-3, "A": 1e3},
    "s": {"s": 1.0, "sec": 1.0, "second": 1.0, "ms": 1e-3, "us": 1e-6, "min": 60.0},
    "mm": _LENGTH,
    "um": {name: size / 1e-3 for name, size in _LENGTH.items()},
    "keV": {"keV": 1.0, "eV": 1e-3, "MeV": 1e3},
    "g/cm3": _DENSITY,
    "deg": {
        "deg": 1.0,
        "degree": 1.0,
        "degrees": 1.0,
        "rad": 57.29577951308232,
        "radian": 57.29577951308232,
        "mrad": 0.05729577951308232,
    },
}


def in_unit(
    value: NDArray[np.float64], spelling: str | None, *, unit: str, field: str
) -> NDArray[np.float64]:
    """Values of a field in the unit used here.

    Parameters
    ----------
    value : array of float64
    spelling : str or None
        What the file says in its `units` attribute, None if it says nothing.
    unit : str
        One of the keys of `SPELLINGS`.
    field : str
        File and field, for the message.

    Raises
    ------
    FileFormatError
        If the unit is missing or not one that can be converted.
    """
    known = SPELLINGS[unit]
    if spelling is None:
        msg = f"{field} has no units attribute; give it one, such as {unit!r}"
        raise FileFormatError(msg)
    size = known.get(spelling.strip())
    if size is None:
        msg = (
            f"{field} has units {spelling!r}, which cannot be turned into {unit}; "
            f"use one of {', '.join(known)}"
        )
        raise FileFormatError(msg)
    return value if size == 1.0 else value * size
