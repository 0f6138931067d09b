"""Energies that one pixel collects from a photon: the sensor's pulse heights."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtr
from scipy.stats import qmc

from spectral.errors import InputError
from spectral.kernels.pulse_height import collect
from spectral.physics import compton, cross_sections, fluorescence

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from spectral.physics.cross_sections import Process

UM_PER_CM = 1.0e4
PAIR_ENERGY_EV = {"Si": 3.62, "CdTe": 4.43, "CdZnTe": 4.6, "GaAs": 4.2}
"""Energy per electron-hole pair, in eV (detector handbooks, from memory)."""
FANO_FACTOR = {"Si": 0.115, "CdTe": 0.1, "CdZnTe": 0.1, "GaAs": 0.12}
"""Fano factors (detector handbooks, from memory)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Sensor:
    """A slab of semiconductor under square pixels, lit from the far side.

    Attributes
    ----------
    material : str
    weight_fractions : mapping of element to weight fraction
    density_g_cm3 : float
    thickness_um, pitch_um : float, in um
    """

    material: str
    weight_fractions: Mapping[str, float]
    density_g_cm3: float
    thickness_um: float
    pitch_um: float

    def __post_init__(self) -> None:
        """Refuse lengths that cannot be."""
        if min(self.thickness_um, self.pitch_um, self.density_g_cm3) <= 0.0:
            msg = (
                "a sensor needs positive thickness, pitch and density, got "
                f"{self.thickness_um} um, {self.pitch_um} um, {self.density_g_cm3} g/cm3"
            )
            raise InputError(msg)


@dataclass(frozen=True, slots=True, kw_only=True)
class ChargeTransport:
    """What happens to the charge before it is counted.

    Attributes
    ----------
    initial_um : float
        Standard deviation of the cloud where it starts, without electron range.
    range_share : float
        The photoelectron adds this share of its range to the standard deviation.
    diffusion_um : float
        Variance gained per um of drift (`charge_sharing.diffusion_variance_per_um`).
    trapping : float
        Share of the charge lost over the whole thickness, linear in drift length.
    fluorescence : float
        Factor on the emission of K photons; 1 as tabulated.
    """

    initial_um: float = 3.0
    range_share: float = 0.2
    diffusion_um: float = 0.1
    trapping: float = 0.0
    fluorescence: float = 1.0


def electron_range_um(
    sensor: Sensor, energy_kev: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Range of an electron in the sensor, in um, shape as ``energy_kev``.

    Notes
    -----
    0.0276 A E^1.67 / (Z^0.889 rho), E in keV, A and Z averaged by weight.
    Source: K. Kanaya, S. Okayama, J. Phys. D 5 (1972) 43 (from memory). Good to
    tens of percent, enough for the small part of the cloud that it adds.
    """
    mass = sum(
        share * cross_sections.atomic_mass(element)
        for element, share in sensor.weight_fractions.items()
    )
    number = sum(
        share * cross_sections.atomic_number(element)
        for element, share in sensor.weight_fractions.items()
    )
    factor = 0.0276 * mass / (number**0.889 * sensor.density_g_cm3)
    return np.asarray(factor * energy_kev**1.67)


@cache
def sample_points(samples: int) -> NDArray[np.float64]:
    """Evenly spread points in [0, 1)^9, shape (sample, 9); always the same.

    Columns: place across and along the pixel, depth; turn and path of a second
    photon; cosine, turn and path of a third; cosine of the second.
    Source: I. M. Sobol, USSR Comput. Math. Math. Phys. 7 (1967) 86, scrambled.
    """
    points = qmc.Sobol(9, rng=np.random.default_rng(20)).random(samples)
    points = np.asarray(np.clip(points, 0.0, 1.0 - 1e-12))
    points.flags.writeable = False
    return points


@cache
def _normal_table() -> NDArray[np.float64]:
    return np.asarray(ndtr(np.arange(-1000, 1001) / 200.0))


def pulse_heights(
    sensor: Sensor,
    charge: ChargeTransport,
    energy_kev: NDArray[np.float64],
    *,
    step_kev: float = 0.5,
    grid: int = 400,
    samples: int = 4096,
    floor_kev: float = 0.25,
) -> NDArray[np.float64]:
    """Mean number of pulses of each height in a pixel per photon upon it.

    Parameters
    ----------
    sensor : Sensor
    charge : ChargeTransport
    energy_kev : array, shape (energy,), in keV
    step_kev : float
        Spacing of the pulse-height grid, which starts at 0.
    grid : int
        Number of grid points; heights beyond the last are lost.
    samples : int
        Interactions per energy and channel (a power of two).
    floor_kev : float
        Smaller pulses are not kept: they are far below any threshold.

    Returns
    -------
    array, shape (energy, grid)
        May add up to more than the absorbed fraction: shared photons and
        fluorescence are seen by several pixels, and every pixel sees as much from
        its neighbours as they see from it.

    Notes
    -----
    Channels: photoelectric absorption without and with each K line (isotropic,
    absorbed in this pixel, in another one, or gone), followed by the K lines that a
    line itself can raise (Te K in CdTe raises Cd K), Compton recoil with the
    scattered photon followed once. Coherent scattering is left out. Fano noise is
    included, electronic noise is not (`spectral.physics.pileup` adds it).
    """
    out = np.zeros((energy_kev.size, grid))
    points = sample_points(samples)
    photo = _linear(sensor, energy_kev, "photo")
    scatter = _linear(sensor, energy_kev, "incoherent")
    active = photo + scatter
    stopped = -np.expm1(-active * sensor.thickness_um)
    lines = fluorescence.fluorescence_lines(sensor.weight_fractions, energy_kev)
    emitted = [charge.fluorescence * line.per_photoabsorption for line in lines]
    silent = 1.0 - sum(emitted, np.zeros_like(energy_kev))
    shape = (energy_kev.size, samples)
    full = np.ascontiguousarray(np.broadcast_to(energy_kev[:, None], shape))
    even = np.ascontiguousarray(np.broadcast_to(2.0 * points[None, :, 8] - 1.0, shape))
    spread = (
        charge.initial_um**2
        + (charge.range_share * electron_range_um(sensor, energy_kev)) ** 2
    )

    def add(
        weight: NDArray[np.float64],
        first: NDArray[np.float64],
        second: NDArray[np.float64],
        mu_second: NDArray[np.float64],
        cosine: NDArray[np.float64],
        third_kev: float = 0.0,
    ) -> None:
        mu_third = float(_linear(sensor, np.array([third_kev or 1.0]), "total")[0])
        collect(
            out, weight, points, active, first, second, mu_second, cosine, third_kev,
            mu_third, spread, charge.diffusion_um, sensor.thickness_um,
            sensor.pitch_um, charge.trapping, floor_kev, step_kev, _normal_table(),
        )  # fmt: skip

    absorbed = stopped * photo / active
    add(absorbed * silent, full, np.zeros(shape), np.ones(shape), even)
    for line, share in zip(lines, emitted, strict=True):
        second = np.full(shape, line.energy_kev)
        mu_second = np.full(
            shape, _linear(sensor, np.array([line.energy_kev]), "total")[0]
        )
        weight = absorbed * share
        for third, part in _raised(sensor, line.energy_kev, charge.fluorescence):
            add(weight * part, full - second, second, mu_second, even, third)
    cosine = compton.scattering_cosine(energy_kev, points[:, 8])
    left = compton.scattered_energy_kev(energy_kev[:, None], cosine)
    add(
        stopped * scatter / active,
        full - left,
        left,
        _linear(sensor, left, "total"),
        cosine,
    )
    return _with_fano(out, sensor, step_kev)


def _raised(
    sensor: Sensor, line_kev: float, fluorescence_factor: float
) -> tuple[tuple[float, float], ...]:
    """K lines that a K photon raises where it is absorbed: (energy or 0, share).

    The sensor's photons of a few tens of keV are absorbed photoelectrically.
    """
    raised = tuple(
        (line.energy_kev, fluorescence_factor * float(line.per_photoabsorption[0]))
        for line in fluorescence.fluorescence_lines(
            sensor.weight_fractions, np.array([line_kev])
        )
    )
    raised = tuple((energy, share) for energy, share in raised if share > 0.0)
    return ((0.0, 1.0 - sum(share for _, share in raised)), *raised)


def _linear(
    sensor: Sensor, energy_kev: NDArray[np.float64], process: Process
) -> NDArray[np.float64]:
    """Linear attenuation of the sensor, in 1/um."""
    return (
        cross_sections.mass_attenuation(
            sensor.weight_fractions, energy_kev, process=process
        )
        * sensor.density_g_cm3
        / UM_PER_CM
    )


def _with_fano(
    heights: NDArray[np.float64], sensor: Sensor, step_kev: float
) -> NDArray[np.float64]:
    """Spread each pulse height by the statistics of pair creation.

    Source: U. Fano, Phys. Rev. 72 (1947) 26: variance F epsilon E.
    """
    kind = sensor.material if sensor.material in FANO_FACTOR else "CdTe"
    height = step_kev * np.arange(heights.shape[1])
    variance = FANO_FACTOR[kind] * PAIR_ENERGY_EV[kind] * 1e-3 * height
    # second difference: exact to second order for a spread below one grid step
    moved = 0.5 * heights * variance / step_kev**2
    out = heights - 2.0 * moved
    out[:, 1:] += moved[:, :-1]
    out[:, :-1] += moved[:, 1:]
    return np.asarray(out)
