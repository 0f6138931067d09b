"""Whether a wedge's steps attenuate about as much as their thicknesses say."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.forward.scan_facts import scan_faults
from spectral.forward.setup import Setup
from spectral.physics.cross_sections import mass_attenuation

if TYPE_CHECKING:
    from collections.abc import Collection

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan

MOST_STEPS = 8
MOST_OPENS = 3
FEWEST_COUNTS = 5.0
LEAST_ATTENUATION = 0.1
"""Of the logarithm of counts: less behind every step tells of no step at all."""
LARGEST_RATIO = 3.0
"""Between the attenuation counted and the expected one: more is no matter of scatter,
charge sharing or pile-up (common practice, no source)."""
CLOSE_RATIO = 1.6
"""Within which steps of a rightly chosen factor lie."""
MOST_STRAY = 0.2
"""Share of steps that may lie elsewhere: they have faults of their own."""
FACTORS = np.geomspace(1e-3, 1e3, 121)
_TYPICAL = {
    "ln_voltage": 0.0,
    "ln_anode_angle": np.log(12.0),
    "extra_filter_mm_al": 0.0,
}


def wedge_faults(scan: Scan) -> tuple[str, ...]:
    """Why a wedge scan cannot be calibrated on, one sentence a reason.

    Parameters
    ----------
    scan : Scan
        Of its counts a few exposures are read, if nothing else is wrong.
    """
    return scan_faults(scan) or thickness_faults(scan)


def thickness_faults(scan: Scan, *, without: Collection[int] = ()) -> tuple[str, ...]:
    """One sentence if all steps attenuate by far more or less than they should.

    Parameters
    ----------
    scan : Scan
        Without faults by `spectral.forward.scan_facts.scan_faults`. Some open and
        wedge exposures are read.
    without : collection of int
        Exposures to leave out.

    Notes
    -----
    Counts above the lowest threshold behind a step, over those of the open beam for
    the same time and current, are compared with the photons above that threshold which
    the sensor would absorb. Lost and shared pulses move the logarithm of that by tens
    of percent; a wrong unit of thickness moves it by far more.
    """
    seen = _counted(scan, without)
    if seen is None:
        return ()
    areal, counted = seen
    if counted.max() < LEAST_ATTENUATION:
        return ()
    beam, attenuation = _beam(scan)
    off = np.log(np.maximum(counted, 1e-3))
    by_factor = np.array(
        [off - np.log(_expected(beam, attenuation, s * areal)) for s in FACTORS]
    )
    as_said = off - np.log(_expected(beam, attenuation, areal))
    size = np.median(np.abs(by_factor), axis=1)
    best = int(size.argmin())
    met = np.abs(by_factor[best]) < np.log(CLOSE_RATIO)
    if abs(np.median(as_said)) < np.log(LARGEST_RATIO) or met.mean() < 1.0 - MOST_STRAY:
        return ()
    return (_sentence(float(FACTORS[best])),)


def _sentence(factor: float) -> str:
    """What a common factor on all thicknesses means."""
    how = "thicker" if factor > 1.0 else "thinner"
    times = max(factor, 1.0 / factor)
    power = 10.0 ** round(np.log10(times))
    near = abs(np.log(times / power)) < np.log(LARGEST_RATIO) / 2.0
    return (
        f"all steps attenuate as if they were {power if near else times:.2g} times "
        f"{how}: are the thicknesses in mm, and materials and densities right?"
    )


def _counted(
    scan: Scan, without: Collection[int]
) -> tuple[NDArray[np.float64], NDArray[np.float64]] | None:
    """Areal densities of some steps, (step, material), and -ln of what they let pass.

    None if there are no opens, or no steps that let anything pass.
    """
    wedge = np.setdiff1d(scan.exposures("wedge"), list(without))
    path = scan.areal_density[wedge].sum(axis=1)
    order = wedge[np.argsort(path)][np.sort(path) > 0]
    opens = np.setdiff1d(scan.exposures("open"), list(without))
    if order.size == 0 or opens.size == 0:
        return None
    steps = order[_spread(order.size, MOST_STEPS)]
    opens = opens[_spread(opens.size, MOST_OPENS)]
    level, _ = _per_output(scan, opens)
    behind, enough = _per_output(scan, steps)
    bright = float(np.median(level))
    if bright <= 0 or not enough.any():
        return None
    return scan.areal_density[steps[enough]], -np.log(behind[enough] / bright)


def _spread(count: int, most: int) -> NDArray[np.int64]:
    """At most so many indices, spread over all."""
    return np.unique(np.linspace(0, count - 1, min(most, count)).round()).astype(int)


def _per_output(
    scan: Scan, exposures: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Median counts above the lowest threshold per s and mA, and whether they do."""
    counts = np.array([np.median(scan.counts.read([e])[0, 0]) for e in exposures])
    output = scan.count_time_s[exposures]
    if scan.current_ma is not None:
        output = output * scan.current_ma[exposures]
    enough = (counts >= FEWEST_COUNTS) & (counts < scan.count_limit) & (output > 0)
    return np.where(enough, counts / np.where(output > 0, output, 1.0), 0.0), enough


def _beam(scan: Scan) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Photons that count in the open beam by energy, and the basis' attenuation."""
    setup = Setup.from_scan(scan)
    sensor = setup.sensor
    stopped = mass_attenuation(sensor.weight_fractions, setup.energy_kev)
    areal = 1e-4 * sensor.thickness_um * sensor.density_g_cm3
    beam = setup.spectrum(_TYPICAL) * -np.expm1(-areal * stopped)
    beam = np.where(setup.energy_kev >= scan.thresholds_kev[0], beam, 0.0)
    return beam / beam.sum(), setup.attenuation


def _expected(
    beam: NDArray[np.float64],
    attenuation: NDArray[np.float64],
    areal: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Minus the logarithm of the share of a beam that steps let pass."""
    path = areal @ attenuation
    least = path.min(axis=1, where=beam > 0, initial=np.inf)
    passed = (beam * np.exp(np.minimum(least[:, None] - path, 0.0))).sum(axis=1)
    return np.asarray(least - np.log(passed))
