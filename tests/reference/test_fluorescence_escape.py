"""K fluorescence of the sensor: how much is emitted, and where it goes."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.physics.cross_sections import mass_attenuation, parse_formula
from spectral.physics.fluorescence import fluorescence_lines, front_escape_probability
from spectral.physics.materials import find_material
from spectral.physics.sensor import ChargeTransport, Sensor, pulse_heights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.physics.cross_sections import Process

pytestmark = pytest.mark.reference

CDTE = find_material("CdTe")
AMERICIUM_KEV = 59.5409
"""Gamma line of Am-241 (decay data, as commonly tabulated)."""
STEP_KEV = 0.25


def cdte(*, thickness_um: float, pitch_um: float) -> Sensor:
    return Sensor(
        material="CdTe",
        weight_fractions=CDTE.weight_fractions,
        density_g_cm3=CDTE.density_g_cm3,
        thickness_um=thickness_um,
        pitch_um=pitch_um,
    )


def per_um(energy_kev: float, process: Process = "total") -> float:
    mass = mass_attenuation(
        CDTE.weight_fractions, np.array([energy_kev]), process=process
    )
    return float(mass[0]) * CDTE.density_g_cm3 * 1e-4


def active_per_um(energy_kev: float) -> float:
    return per_um(energy_kev, "photo") + per_um(energy_kev, "incoherent")


def emitted_per_interaction(formula: str, energy_kev: float) -> float:
    """K photons per interaction of any kind."""
    fractions = find_material(formula).weight_fractions
    energy = np.array([energy_kev])
    photo = mass_attenuation(fractions, energy, process="photo")
    total = mass_attenuation(fractions, energy)
    lines = fluorescence_lines(fractions, energy)
    return sum(float((line.per_photoabsorption * photo / total)[0]) for line in lines)


@pytest.mark.parametrize(
    ("formula", "energy", "probability", "tolerance"),
    [
        # worked out with xraylib 4.3 (T. Schoonjans et al., Spectrochim. Acta B 66
        # (2011) 776): w tau / mu (1 - 1/J) omega; its yields (M. O. Krause, J. Phys.
        # Chem. Ref. Data 8 (1979) 307) differ by 1-4 % for Cd and Te and by 4-5 % for
        # Ga and As from the table used here
        ("CdTe", 28.0, 0.560, 0.03),
        ("CdTe", 40.0, 0.700, 0.03),
        ("CdTe", 60.0, 0.683, 0.03),
        ("CdTe", 100.0, 0.63, 0.03),
        ("GaAs", 20.0, 0.466, 0.06),
        ("GaAs", 60.0, 0.417, 0.06),
    ],
)
def test_emission_per_interaction(
    formula: str, energy: float, probability: float, tolerance: float
) -> None:
    found = emitted_per_interaction(formula, energy)
    assert found == pytest.approx(probability, rel=tolerance)


@pytest.mark.parametrize("energy", [40.0, 60.0, 100.0])
def test_emission_agrees_with_an_independent_library(energy: float) -> None:
    xraylib = pytest.importorskip("xraylib")
    expected = 0.0
    for element, number in (("Cd", 48), ("Te", 52)):
        jump = xraylib.JumpFactor(number, xraylib.K_SHELL)
        expected += (
            CDTE.weight_fractions[element]
            * xraylib.CS_Photo(number, energy)
            / xraylib.CS_Total_CP("CdTe", energy)
            * (1.0 - 1.0 / jump)
            * xraylib.FluorYield(number, xraylib.K_SHELL)
        )
    assert emitted_per_interaction("CdTe", energy) == pytest.approx(expected, rel=0.03)


def test_no_line_below_its_edge_and_none_from_silicon() -> None:
    # Te emits above 31.81 keV only; the 1.74 keV line of Si stops where it starts
    energy = np.array([26.0, 30.0, 35.0])
    for line in fluorescence_lines(CDTE.weight_fractions, energy):
        emits = [False, line.element == "Cd", True]
        assert (line.per_photoabsorption > 0.0).tolist() == emits
    assert fluorescence_lines({"Si": 1.0}, energy) == ()
    assert set(parse_formula("CdTe")) == set(CDTE.weight_fractions)


def escape_by_drawing(line_kev: float, energy_kev: float) -> tuple[float, float]:
    """Share of emitted photons that leave a half-space by its lit face, and error."""
    rng = np.random.default_rng(3)
    draws = 400_000
    depth = rng.exponential(1.0 / per_um(energy_kev), draws)
    path = rng.exponential(1.0 / per_um(line_kev), draws)
    away = depth + path * rng.uniform(-1.0, 1.0, draws) < 0.0
    return float(away.mean()), float(away.std() / np.sqrt(draws))


def test_front_escape_equals_brute_force() -> None:
    for line in (23.11, 27.38):
        for energy in (35.0, 60.0, 100.0):
            drawn, error = escape_by_drawing(line, energy)
            exact = front_escape_probability(per_um(line), per_um(energy))
            assert abs(drawn - exact) < 5.0 * error


def test_front_escape_of_the_cadmium_line() -> None:
    # P. Axel's closed form (Rev. Sci. Instrum. 25 (1954) 391, from memory), 60 keV
    # upon CdTe, Cd K-alpha: 0.0878 with mu of NIST SRD 126
    found = front_escape_probability(per_um(23.11), per_um(60.0))
    assert found == pytest.approx(0.0878, abs=5e-4)


def test_front_escape_has_its_limits() -> None:
    # half of the photons go forward: none of the others is held back, or all are
    assert front_escape_probability(1e-6, 1.0) == pytest.approx(0.5, abs=1e-4)
    assert front_escape_probability(1.0, 1e-6) == pytest.approx(0.0, abs=1e-6)


@pytest.fixture(scope="module")
def half_space() -> NDArray[np.float64]:
    """Pulse heights of Am-241 in a thick, wide sensor."""
    found = pulse_heights(
        cdte(thickness_um=20_000.0, pitch_um=1e6),
        ChargeTransport(),
        np.array([AMERICIUM_KEV]),
        step_kev=STEP_KEV,
        samples=16384,
    )
    return np.asarray(found[0])


def near(heights: NDArray[np.float64], level_kev: float, width: float = 0.8) -> float:
    level = STEP_KEV * np.arange(heights.size)
    return float(heights[np.abs(level - level_kev) < width].sum())


def test_escape_peaks_stand_at_the_gamma_line_less_the_k_lines(
    half_space: NDArray[np.float64],
) -> None:
    # K lines of J. A. Bearden, Rev. Mod. Phys. 39 (1967) 78 (from memory), K-alpha1 and
    # K-alpha2 weighted 100 : 54: Cd 23.174, 22.984 -> 23.11; Te 27.472, 27.202 -> 27.38
    level = STEP_KEV * np.arange(half_space.size)
    for line in (23.11, 27.38):
        close = np.abs(level - (AMERICIUM_KEV - line)) < 0.8
        peak = (half_space * level)[close].sum() / half_space[close].sum()
        assert peak == pytest.approx(AMERICIUM_KEV - line, abs=0.06)
        beside = near(half_space, AMERICIUM_KEV - line - 1.8, 0.3)
        assert near(half_space, AMERICIUM_KEV - line) > 20.0 * beside


def test_escape_peaks_hold_what_the_closed_form_says(
    half_space: NDArray[np.float64],
) -> None:
    # tellurium only: its lines may raise cadmium's, whose peaks hold more than this
    energy = np.array([AMERICIUM_KEV])
    photo = per_um(AMERICIUM_KEV, "photo") / active_per_um(AMERICIUM_KEV)
    for line in fluorescence_lines(CDTE.weight_fractions, energy):
        away = front_escape_probability(
            per_um(line.energy_kev), active_per_um(AMERICIUM_KEV)
        )
        direct = photo * float(line.per_photoabsorption[0]) * away
        found = near(half_space, AMERICIUM_KEV - line.energy_kev)
        if line.element == "Te":
            # 4 %: 16 384 points, a tenth of which escape
            assert found == pytest.approx(direct, rel=0.04)
        else:
            assert 1.2 * direct < found < 2.0 * direct


def flight(
    rng: np.random.Generator, start: NDArray[np.float64], line_kev: float
) -> NDArray[np.float64]:
    """Where K photons sent anywhere from ``start`` (draw, 3) are absorbed."""
    direction = rng.normal(size=start.shape)
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    path = rng.exponential(1.0 / per_um(line_kev), (start.shape[0], 1))
    return np.asarray(start + path * direction)


def drawn_pulses(
    pitch_um: float, energy_kev: float, first_kev: float, raised_kev: float
) -> list[NDArray[np.float64]]:
    """Pulse heights by brute force, one array for each of up to three sites.

    A photon leaves the rest of its energy where it interacts in 1 mm of CdTe, its K
    photon is absorbed elsewhere or lost, and may raise another one there (0: none).
    """
    rng = np.random.default_rng(4)
    draws, thickness = 200_000, 1000.0
    active = active_per_um(energy_kev)
    stopped = -np.expm1(-active * thickness)
    depth = -np.log1p(-stopped * rng.random(draws)) / active
    here = np.column_stack([rng.uniform(0.0, pitch_um, (draws, 2)), depth])
    there = flight(rng, here, first_kev)
    kept = np.abs(there[:, 2] - 0.5 * thickness) < 0.5 * thickness
    last = flight(rng, there, raised_kev) if raised_kev else there
    held = np.abs(last[:, 2] - 0.5 * thickness) < 0.5 * thickness
    energy = np.column_stack(
        [
            np.full(draws, energy_kev - first_kev),
            kept * (first_kev - raised_kev),
            (kept & held) * raised_kev,
        ]
    )
    pixel = [np.floor(site[:, :2] / pitch_um) for site in (here, there, last)]
    same = [[(pixel[a] == pixel[b]).all(axis=1) for b in range(3)] for a in range(3)]
    first = energy[:, 0] + same[0][1] * energy[:, 1] + same[0][2] * energy[:, 2]
    second = (energy[:, 1] + same[1][2] * energy[:, 2]) * ~same[0][1]
    third = energy[:, 2] * ~same[0][2] * ~same[1][2]
    return [first, second, third]


def expected_near(
    pitch_um: float, energy_kev: float, levels: list[float]
) -> list[float]:
    """Pulses near each level per photon, over all K lines and what those raise."""
    photo = per_um(energy_kev, "photo") / active_per_um(energy_kev)
    stopped = -np.expm1(-active_per_um(energy_kev) * 1000.0)
    total = np.zeros(len(levels))
    for line in fluorescence_lines(CDTE.weight_fractions, np.array([energy_kev])):
        raised = [
            (other.energy_kev, float(other.per_photoabsorption[0]))
            for other in fluorescence_lines(
                CDTE.weight_fractions, np.array([line.energy_kev])
            )
        ]
        raised.append((0.0, 1.0 - sum(share for _, share in raised)))
        emitted = stopped * photo * float(line.per_photoabsorption[0])
        for raised_kev, share in raised:
            if share == 0.0:
                continue
            pulses = drawn_pulses(pitch_um, energy_kev, line.energy_kev, raised_kev)
            for k, level in enumerate(levels):
                close = sum(float((np.abs(p - level) < 0.2).mean()) for p in pulses)
                total[k] += emitted * share * close
    return total.tolist()


@pytest.mark.slow
@pytest.mark.parametrize("pitch_um", [55.0, 100.0, 250.0, 1e6])
def test_pulses_of_k_photons_equal_brute_force(pitch_um: float) -> None:
    # point-like clouds: a K photon that stops in another pixel leaves a pulse of its
    # own energy there, and one of the rest where it came from
    charge = ChargeTransport(initial_um=1e-3, range_share=0.0, diffusion_um=0.0)
    heights = pulse_heights(
        cdte(thickness_um=1000.0, pitch_um=pitch_um),
        charge,
        np.array([60.0]),
        step_kev=STEP_KEV,
        samples=16384,
    )[0]
    lines = [
        line.energy_kev
        for line in fluorescence_lines(CDTE.weight_fractions, np.array([60.0]))
    ]
    levels = [*lines, *(60.0 - line for line in lines)]
    expected = expected_near(pitch_um, 60.0, levels)
    for level, wanted in zip(levels, expected, strict=True):
        found = near(heights, level, 0.6)
        # 3 % and 2e-4: 16 384 points and 200 000 draws
        assert found == pytest.approx(wanted, rel=0.03, abs=2e-4), level


@pytest.mark.parametrize("energy", [20.0, 40.0, 60.0, 80.0, 100.0])
def test_wide_sensor_counts_what_it_stops(energy: float) -> None:
    # one pulse for each photon that is not passed on: photoelectric and incoherent
    # cross sections of NIST (J. H. Hubbell, S. M. Seltzer, SRD 126) by the library
    sensor = cdte(thickness_um=1000.0, pitch_um=1e6)
    heights = pulse_heights(
        sensor,
        ChargeTransport(),
        np.array([energy]),
        step_kev=STEP_KEV,
        grid=600,
        floor_kev=0.0,
    )
    stopped = -np.expm1(-active_per_um(energy) * 1000.0)
    assert heights.sum() == pytest.approx(stopped, rel=1e-3)
    # 1 mm of CdTe with mu of all processes (xraylib 4.3): 1.000, 1.000, 0.978, 0.829,
    # 0.624; coherent scattering does not count and makes it 0.01 to 0.02 less
    with_coherent = {20.0: 1.0, 40.0: 1.0, 60.0: 0.978, 80.0: 0.829, 100.0: 0.624}
    assert -0.03 < stopped - with_coherent[energy] < 0.001
