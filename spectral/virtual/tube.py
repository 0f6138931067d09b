"""A virtual tube: how many photons it sends upon each pixel, and how that drifts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError
from spectral.physics.materials import find_material
from spectral.physics.tube import tube_spectrum

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

TUNGSTEN_G_CM2_PER_UM = 19.3e-4
"""Density of tungsten, 19.3 g/cm3, by um (NIST SRD 126, from memory)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class VirtualTube:
    """Output of a tube at the detector.

    Attributes
    ----------
    photons_per_mas : float
        Photons per mA s upon a pixel of nominal area, through the scan's filters
        with nothing else in the beam, at the middle row.
    drift_step : float
        Standard deviation of the step that the logarithm of the output takes from
        one exposure to the next.
    warm_up, warm_up_exposures : float
        Share of the output that is missing at first, and the number of exposures
        after which it has shrunk to 1/e.
    heel : float
        Output of the last row over that of the first, less 1; linear between.
    heel_tungsten_um : float, in um
        Path in the anode that the last row's beam has beyond the first row's: it
        hardens the spectrum (and weakens it further).
    anode_angle_deg : float, in degrees
    """

    photons_per_mas: float
    drift_step: float = 0.0
    warm_up: float = 0.0
    warm_up_exposures: float = 5.0
    heel: float = 0.0
    heel_tungsten_um: float = 0.0
    anode_angle_deg: float = 12.0

    def __post_init__(self) -> None:
        """Refuse what cannot be."""
        if not self.photons_per_mas > 0.0:
            msg = f"photons_per_mas must be positive, got {self.photons_per_mas!r}"
            raise InputError(msg)
        if not 0.0 <= self.warm_up < 1.0 or not self.warm_up_exposures > 0.0:
            msg = (
                "warm_up must lie in [0, 1) and warm_up_exposures be positive, got "
                f"{self.warm_up!r} and {self.warm_up_exposures!r}"
            )
            raise InputError(msg)
        if self.heel <= -1.0 or self.heel_tungsten_um < 0.0 or self.drift_step < 0.0:
            msg = (
                "heel must exceed -1, heel_tungsten_um and drift_step not be negative, "
                f"got {self.heel!r}, {self.heel_tungsten_um!r} and {self.drift_step!r}"
            )
            raise InputError(msg)

    def output(self, exposures: int, rng: np.random.Generator) -> NDArray[np.float64]:
        """Relative output of each exposure, shape (exposure,)."""
        walk = np.cumsum(rng.normal(0.0, 1.0, exposures)) * self.drift_step
        late = np.exp(-np.arange(exposures) / self.warm_up_exposures)
        return np.exp(walk) * (1.0 - self.warm_up * late)

    def over_rows(self, rows: int) -> NDArray[np.float64]:
        """Relative output of each row, shape (row,), mean 1."""
        place = np.linspace(0.0, 1.0, rows) if rows > 1 else np.array([0.5])
        profile = 1.0 + self.heel * place
        return np.asarray(profile / profile.mean())

    def anode_path_g_cm2(self, rows: int) -> NDArray[np.float64]:
        """Tungsten that each row's beam crosses beyond the first row's, in g/cm2."""
        longest = self.heel_tungsten_um * TUNGSTEN_G_CM2_PER_UM
        return np.linspace(0.0, longest, rows)


def open_spectrum(
    template: Scan, tube: VirtualTube, borders_kev: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Share of photons in each energy bin of the scan's open beam, sum 1."""
    photons = tube_spectrum(
        template.voltage_kv, borders_kev, anode_angle_deg=tube.anode_angle_deg
    )
    middle = 0.5 * (borders_kev[1:] + borders_kev[:-1])
    for layer in template.filters:
        material = find_material(layer.material)
        crossed = material.areal_density(layer.thickness_mm)
        photons = photons * np.exp(-crossed * material.mass_attenuation(middle))
    return np.asarray(photons / photons.sum())
