"""Spectrum of a tungsten X-ray tube.

Trust. A clean tungsten target behind 2.5 mm of Al, 40 to 150 kV, against the two
reference models of the package spekpy: output within 5 %, mean energy 0.6 %, half-value
layer 1.5 %; shape 1 to 3 % (rms) between 35 and 95 % of the voltage, K lines apart. In
the last 2 % below the voltage it is some 10 % low. Half-value layers of the IEC 61267
(2005) beam qualities RQA: within 2.1 % up to 80 kV and 0.5 % from 90 kV on. K lines
within 10 %, more just above their edge. Left out: L lines (nothing below 13 keV is to
be trusted), off-focal radiation, voltage ripple, roughness of an aged target, scatter.
Real tubes differ from each other by more than the models do: calibrate.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.physics.tube_lines import line_photons
from spectral.physics.tube_target import (
    bremsstrahlung_per_path,
    escape,
    path_length,
    stopping_power,
    towards_window,
    tungsten_attenuation,
)

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

LOWEST_KV, HIGHEST_KV = 20.0, 160.0
ELECTRONS_PER_MAS = 6.241509e15  # 1 mA s over the elementary charge, SI
SPECTRUM_NAMES = ("tungsten", "spekpy", "spekpy-kqp")
_LOWEST_BORDER_KEV = 3.0
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(16)
_UNIT_NODES, _UNIT_WEIGHTS = 0.5 * (_NODES + 1.0), 0.5 * _WEIGHTS
_BIN_NODES, _BIN_WEIGHTS = np.polynomial.legendre.leggauss(2)


def tube_spectrum(
    voltage_kv: float, borders_kev: ArrayLike, *, anode_angle_deg: float = 12.0
) -> NDArray[np.float64]:
    r"""Photons of a tungsten tube in each energy bin, before any filter.

    Parameters
    ----------
    voltage_kv : float, in kV
        Constant tube voltage, 20 to 160.
    borders_kev : array, shape (bin + 1,), in keV
        Rising bin borders, 3 keV or more. Put one on the tungsten K edge if the bins
        are wide.
    anode_angle_deg : float, in degrees
        Take-off angle between target face and beam; electrons meet the face upright.

    Returns
    -------
    array, shape (bin,), photons per mA s and steradian
        Zero above the voltage. Continuous, with continuous first derivative, in
        voltage and angle; a K line falls into the bin that holds it.

    Raises
    ------
    InputError
        If voltage, angle or borders are outside the model.

    Notes
    -----
    Thick target: each electron slows down from `voltage_kv`, radiates after the
    tabulated cross section, and the photon leaves through the tungsten above it,

    .. math::

        N(k) = \frac{1}{4\pi} \int_k^{T_0} \frac{N_A}{A}
        \frac{d\sigma}{dk}(T, k) \frac{W(T/T_0)\, G(T/T_0, \mu(k))}{S(T)}\, dT ,

    with stopping power S, direction W and escape G of `spectral.physics.tube_target`.
    K lines: `spectral.physics.tube_lines`.
    Source: the integral, D. M. Tucker, G. T. Barnes, D. P. Chakraborty, Med. Phys. 18
    (1991) 211-218, eq. 7 (number from memory).
    """
    borders = _checked(voltage_kv, borders_kev, anode_angle_deg)
    photons = np.zeros(borders.size - 1)
    lit = int(np.searchsorted(borders[:-1], voltage_kv))
    low, high = borders[:lit], np.minimum(borders[1 : lit + 1], voltage_kv)
    half = 0.5 * (high - low)
    energy = low[:, None] + half[:, None] * (_BIN_NODES + 1.0)
    density = _bremsstrahlung(voltage_kv, energy.ravel(), anode_angle_deg)
    photons[:lit] = half * (density.reshape(energy.shape) @ _BIN_WEIGHTS)
    for line_kev, count in line_photons(voltage_kv, anode_angle_deg):
        bin_of_line = int(np.searchsorted(borders, line_kev, side="right")) - 1
        if 0 <= bin_of_line < photons.size:
            photons[bin_of_line] += count
    return photons * ELECTRONS_PER_MAS


def spectrum_by_name(
    name: str,
    voltage_kv: float,
    borders_kev: ArrayLike,
    *,
    anode_angle_deg: float = 12.0,
) -> NDArray[np.float64]:
    """Photons per bin, mA s and steradian, from the source of that name.

    Parameters
    ----------
    name : {"tungsten", "spekpy", "spekpy-kqp"}
        "tungsten" is `tube_spectrum`. The other two ask the package spekpy, if it is
        installed, with its default or its "kqp" physics.
    voltage_kv, borders_kev, anode_angle_deg
        As in `tube_spectrum`.

    Returns
    -------
    array, shape (bin,), photons per mA s and steradian

    Raises
    ------
    InputError
        If the name is unknown or the package is missing.

    Notes
    -----
    Half-value layers of RQA beams, as computed with it: within 2.4 % of IEC 61267
    (2005) up to 80 kV, 1 % above.
    Source: G. Poludniowski, A. Omar, R. Bujila, P. Andreo, Med. Phys. 48 (2021) 3630.
    """
    if name == "tungsten":
        return tube_spectrum(voltage_kv, borders_kev, anode_angle_deg=anode_angle_deg)
    if name not in SPECTRUM_NAMES:
        msg = f"spectrum {name!r} is unknown: use one of {', '.join(SPECTRUM_NAMES)}"
        raise InputError(msg)
    borders = _checked(voltage_kv, borders_kev, anode_angle_deg)
    physics = "kqp" if name == "spekpy-kqp" else "casim"
    return _from_spekpy(voltage_kv, borders, anode_angle_deg, physics)


def _bremsstrahlung(
    voltage_kv: float, photon_kev: NDArray[np.float64], anode_angle_deg: float
) -> NDArray[np.float64]:
    """Photons per keV, electron and steradian at each energy below the voltage."""
    span = voltage_kv - photon_kev[:, None]
    photon = np.broadcast_to(photon_kev[:, None], (photon_kev.size, _NODES.size))
    electron = photon + span * _UNIT_NODES
    absorbed = (
        tungsten_attenuation(photon_kev)
        * path_length(voltage_kv)
        / np.sin(np.deg2rad(anode_angle_deg))
    )
    per_kev = (
        bremsstrahlung_per_path(electron, photon)
        / stopping_power(electron)
        * towards_window(voltage_kv, electron, anode_angle_deg)
        * escape(voltage_kv, electron, absorbed[:, None])
    )
    return np.asarray((span * per_kev) @ _UNIT_WEIGHTS) / (4.0 * np.pi)


def _from_spekpy(
    voltage_kv: float,
    borders: NDArray[np.float64],
    anode_angle_deg: float,
    physics: str,
) -> NDArray[np.float64]:
    try:
        spekpy = importlib.import_module("spekpy")
    except ImportError as error:
        msg = (
            "the spectrum 'spekpy' needs the package spekpy: install it with "
            "pip install 'wedgewright[spekpy]', or use the spectrum 'tungsten'"
        )
        raise InputError(msg) from error
    width = 0.5
    tube = spekpy.Spek(
        kvp=voltage_kv, th=anode_angle_deg, dk=width, physics=physics, z=100.0, mas=1.0
    )
    centre, per_kev = tube.get_spectrum()
    edges = np.append(centre - 0.5 * width, centre[-1] + 0.5 * width)
    below = np.concatenate([[0.0], np.cumsum(per_kev * width)])
    per_cm2 = np.diff(np.interp(borders, edges, below))
    return np.asarray(per_cm2 * 100.0**2)


def _checked(
    voltage_kv: float, borders_kev: ArrayLike, anode_angle_deg: float
) -> NDArray[np.float64]:
    """Borders as an array, once everything is inside the model."""
    if not LOWEST_KV <= voltage_kv <= HIGHEST_KV:
        msg = (
            f"tube voltage {voltage_kv:g} kV is outside the model "
            f"({LOWEST_KV:g} to {HIGHEST_KV:g} kV)"
        )
        raise InputError(msg)
    if not 1.0 <= anode_angle_deg <= 60.0:
        msg = f"anode angle {anode_angle_deg:g} degrees is outside the model (1 to 60)"
        raise InputError(msg)
    borders = np.asarray(borders_kev, dtype=np.float64)
    if borders.ndim != 1 or borders.size < 2 or not np.all(np.diff(borders) > 0.0):
        msg = "borders_kev must be a rising list of at least two energies"
        raise InputError(msg)
    if borders[0] < _LOWEST_BORDER_KEV:
        msg = (
            f"lowest bin border {borders[0]:g} keV is below the tube model "
            f"({_LOWEST_BORDER_KEV:g} keV)"
        )
        raise InputError(msg)
    return borders
