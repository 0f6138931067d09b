"""What nobody knows exactly about tube and sensor, as parameters with priors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Nuisance:
    """One parameter of the population, with a normal prior.

    Attributes
    ----------
    name : str
        A name that starts with ``ln_`` holds the logarithm of a factor or value.
    start : float
        Prior mean.
    spread : float
        Prior standard deviation: how far real instruments differ from their data
        sheets (common practice, no source).
    step : float
        For numerical derivatives.
    changes_heights : bool
        The sensor's pulse heights must be computed anew when it moves.
    """

    name: str
    start: float
    spread: float
    step: float
    changes_heights: bool = False


def population_nuisances(thresholds: int) -> tuple[Nuisance, ...]:
    """Parameters of a population fit for a detector with so many thresholds."""
    shifts = tuple(
        Nuisance(name=f"shift_{k + 1}_kev", start=0.0, spread=2.0, step=0.05)
        for k in range(thresholds)
    )
    return (
        Nuisance(name="ln_flux", start=0.0, spread=10.0, step=1e-3),
        Nuisance(name="ln_voltage", start=0.0, spread=0.01, step=2e-3),
        Nuisance(name="ln_anode_angle", start=np.log(12.0), spread=0.3, step=0.05),
        Nuisance(name="extra_filter_mm_al", start=0.3, spread=0.4, step=0.05),
        Nuisance(name="ln_noise", start=np.log(1.5), spread=0.5, step=0.05),
        Nuisance(name="ln_dead_time", start=np.log(20.0), spread=2.0, step=0.05),
        Nuisance(name="ln_tail", start=np.log(60.0), spread=1.5, step=0.05),
        Nuisance(name="ln_order", start=np.log(1.5), spread=0.5, step=0.05),
        *(
            Nuisance(name=name, start=start, spread=sd, step=step, changes_heights=True)
            for name, start, sd, step in (
                ("ln_initial_cloud", np.log(4.0), 0.5, 0.1),
                ("ln_diffusion", np.log(0.12), 0.5, 0.1),
                ("trapping", 0.0, 0.03, 0.005),
                ("ln_fluorescence", 0.0, 0.05, 0.05),
                ("ln_thickness", 0.0, 0.03, 0.02),
            )
        ),
        *shifts,
    )


def as_mapping(
    nuisances: tuple[Nuisance, ...], values: NDArray[np.float64]
) -> dict[str, float]:
    """Values by name."""
    return {n.name: float(v) for n, v in zip(nuisances, values, strict=True)}
