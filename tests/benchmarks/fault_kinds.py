"""Scans with planted faults, and how each is to be named.

Each scan is drawn event by event from a virtual detector; a fault then changes what
truly was (exposed anew), what was stored, or what the file says.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from spectral.demo.scenario import ALUMINIUM, POLYMER, STACKS_MM, THRESHOLDS_KEV
from spectral.demo.scenario import detector as demonstration_detector
from spectral.physics.cross_sections import k_edge_kev
from spectral.scans.scan import CountsInMemory, Filter, Scan
from spectral.virtual.pulse_library import PulseLibrary, build_library, energy_borders
from spectral.virtual.tube import VirtualTube
from spectral.virtual.virtual_scan import simulate_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from numpy.typing import NDArray

PIXELS = 14
CURRENT_MA, COUNT_TIME_S = 4.0, 0.1
DRIFT_STEP = 5e-4
TUBE = VirtualTube(photons_per_mas=16000.0, drift_step=DRIFT_STEP, heel=0.02)
DETECTOR = demonstration_detector()
NAMES = (POLYMER.name, ALUMINIUM.name)
LARGEST_MM = np.array(STACKS_MM).max(axis=0)
WITHIN = 3.0
"""Stated errors that a named value may be off by."""


def template(seed: int) -> Scan:
    """What is exposed: darks, opens at three currents, twenty stacks, opens again."""
    order = np.random.default_rng([seed, 1]).permutation(len(STACKS_MM))
    none = [(0.0, 0.0)]
    stacks = [STACKS_MM[i] for i in order]
    half = len(stacks) // 2
    thickness = none * 6 + stacks[:half] + none + stacks[half:] + none * 4
    role = ["dark"] * 2 + ["open"] * 4 + ["wedge"] * half + ["open"]
    role += ["wedge"] * (len(stacks) - half) + ["open"] * 3 + ["dark"]
    current = np.full(len(role), CURRENT_MA)
    seconds = np.full(len(role), COUNT_TIME_S)
    current[[4, -3]], current[[5, -2]] = 2.0, 0.8
    seconds[[5, -2]] = 2 * COUNT_TIME_S
    current[np.array(role) == "dark"] = 0.0
    return Scan(
        counts=CountsInMemory(
            np.zeros((len(role), len(THRESHOLDS_KEV), PIXELS, PIXELS), np.uint32)
        ),
        thresholds_kev=np.array(THRESHOLDS_KEV),
        role=tuple(role),
        thickness_mm=np.array(thickness),
        materials=(POLYMER, ALUMINIUM),
        count_time_s=seconds,
        current_ma=current,
        voltage_kv=90.0,
        filters=(Filter(material="Al", thickness_mm=2.0),),
        sensor_material="CdTe",
        sensor_thickness_mm=1.0,
        pixel_size_um=(120.0, 120.0),
        pixel_mask=np.zeros((PIXELS, PIXELS), np.uint32),
        source="planted scan",
    )


def sensor_library() -> PulseLibrary:
    """The sensor's pulses, the same for all seeds."""
    edges = tuple(k_edge_kev(e) for e in ("H", "C", "N", "O", "Al"))
    return build_library(DETECTOR.sensor, energy_borders(90.0, edges), seed=1)


@dataclass(frozen=True, kw_only=True)
class Bench:
    """A clean scan, and the means to expose parts of it otherwise."""

    seed: int
    clean: Scan
    library: PulseLibrary

    @property
    def counts(self) -> NDArray[np.uint32]:
        """A copy of the clean counts."""
        return self.clean.counts.read(range(self.clean.shape[0])).copy()

    def exposed(
        self,
        exposures: NDArray[np.int64] | list[int],
        *,
        said: Scan | None = None,
        tube: VirtualTube = TUBE,
        **truth: Any,
    ) -> NDArray[np.uint32]:
        """Counts of some exposures under other conditions (as `simulate_scan`)."""
        run = simulate_scan(
            self.clean if said is None else said,
            DETECTOR,
            tube,
            seed=self.seed,
            library=self.library,
            on_demand=True,
            **truth,
        )
        return run.scan.counts.read(exposures)

    def with_exposure(self, exposure: int, **truth: Any) -> Scan:
        """The clean scan, one exposure of which was taken otherwise than it says."""
        counts = self.counts
        counts[exposure] = self.exposed([exposure], **truth)[0]
        return self.clean.with_counts(counts)


def bench(seed: int, folder: Path, library: PulseLibrary) -> Bench:
    """The clean scan of a seed, from a file if it was simulated before."""
    file = folder / f"clean_{seed}_{PIXELS}.npy"
    made = Bench(seed=seed, clean=template(seed), library=library)
    if not file.exists():
        np.save(file, made.exposed(range(made.clean.shape[0])))  # type: ignore[arg-type]
    return replace(made, clean=made.clean.with_counts(np.load(file)))


@dataclass(frozen=True, kw_only=True)
class Planted:
    """A scan with a fault.

    Attributes
    ----------
    scan : Scan
    faulty : tuple of int
        Exposures to be found; none for a change that goes through the whole scan.
    named : callable
        Place of the truth among the explanations in the sentences (one for each
        exposure, and those on trends), from 1; 0 if it is not there.
    """

    scan: Scan
    faulty: tuple[int, ...]
    named: Callable[[dict[int, str], list[str]], int]


def explanations(said: str) -> list[str]:
    """What a sentence says would fit, the likeliest first."""
    fits = said.removesuffix("; left out").partition("the counts fit ")[2]
    first, _, others = fits.partition(" (or ")
    return [first, *others.removesuffix(")").split("; or ")] if fits else []


def rank(said: str, right: Callable[[str], bool]) -> int:
    """Place of the first right explanation, from 1; 0 if there is none."""
    every = enumerate(explanations(said), start=1)
    return next((place for place, words in every if right(words)), 0)


def near(words: str, pattern: str, truth: float) -> bool:
    """Whether words hold a value with its error, and the truth within it."""
    found = re.search(rf"([-+]?[\d.]+) \+- ([\d.]+) {pattern}", words)
    if found is None:
        return False
    return abs(float(found[1]) - truth) < WITHIN * float(found[2])


def layer_alone(words: str, name: str, truth: float) -> bool:
    """Whether words blame this layer alone, and the truth is within its error."""
    return words.count("+-") == 1 and near(words, f"mm {name}", truth)


def has_stack(words: str, truth: NDArray[np.float64]) -> bool:
    """Whether a stack of the list, or a fitted one, is the true one."""
    if " +- " not in words:
        stated = words.partition(", the stack of")[0]
        layers = dict.fromkeys(NAMES, 0.0)
        for mm, name in re.findall(r"([\d.]+) mm (\w+)", stated):
            layers[name] = float(mm)
        return bool(np.allclose(list(layers.values()), truth))
    return all(
        near(words, f"mm {name}", mm) or (mm == 0.0 and name not in words)
        for name, mm in zip(NAMES, truth, strict=True)
    )


def on_step(
    bench: Bench, step: int, right: Callable[[str], bool], **truth: Any
) -> Planted:
    """One exposure taken otherwise than the file says; right words explain it."""
    return Planted(
        scan=bench.with_exposure(step, **truth),
        faulty=(step,),
        named=lambda said, _: rank(said[step], right),
    )


def stored(scan: Scan, step: int, remark: str) -> Planted:
    """One exposure whose stored image is wrong; a remark tells how."""
    return Planted(
        scan=scan, faulty=(step,), named=lambda said, _: int(remark in said[step])
    )


def any_step(
    bench: Bench, rng: np.random.Generator, *, after_step: bool = False
) -> int:
    """A wedge exposure, if so wished one that follows another."""
    steps = bench.clean.exposures("wedge")
    return int(rng.choice(steps[np.isin(steps - 1, steps)] if after_step else steps))


def thickness(off: float) -> Callable[[Bench, np.random.Generator], Planted]:
    """One layer of a step, at least a quarter of the thickest, is off by a share."""

    def plant(bench: Bench, rng: np.random.Generator) -> Planted:
        material = bench.seed % 2
        truth = bench.clean.thickness_mm.copy()
        thick = truth[:, material] > 0.25 * LARGEST_MM[material]
        step = int(rng.choice(np.flatnonzero(thick)))
        truth[step, material] *= 1.0 + off * rng.choice([-1.0, 1.0])
        mm, name = float(truth[step, material]), NAMES[material]
        return on_step(
            bench, step, lambda w: layer_alone(w, name, mm), true_thickness_mm=truth
        )

    return plant


def said_otherwise(bench: Bench, said: dict[int, NDArray[np.float64]]) -> Scan:
    """The clean scan with other stacks in its list."""
    list_mm = bench.clean.thickness_mm.copy()
    for e, stack in said.items():
        list_mm[e] = stack
    return replace(bench.clean, thickness_mm=list_mm)


def materials_exchanged(bench: Bench, rng: np.random.Generator) -> Planted:
    """A step's two thicknesses stand in each other's column."""
    mm = bench.clean.thickness_mm
    step = int(rng.choice(np.flatnonzero((mm[:, 0] != mm[:, 1]) & (mm[:, 0] < 20.0))))
    return Planted(
        scan=said_otherwise(bench, {step: mm[step, ::-1]}),
        faulty=(step,),
        named=lambda said, _: rank(said[step], lambda w: has_stack(w, mm[step])),
    )


def swapped(bench: Bench, rng: np.random.Generator) -> Planted:
    """Two steps stand in each other's place in the list."""
    mm = bench.clean.thickness_mm
    a, b = map(int, rng.choice(bench.clean.exposures("wedge"), 2, replace=False))
    return Planted(
        scan=said_otherwise(bench, {a: mm[b], b: mm[a]}),
        faulty=(a, b),
        named=lambda said, _: int(
            f"swapped with exposure {b};" in said[a]
            and f"swapped with exposure {a};" in said[b]
        ),
    )


def copied(bench: Bench, target: int, source: int) -> Planted:
    """One exposure's image in the place of another's."""
    counts = bench.counts
    counts[target] = counts[source]
    remark = f"counts are those of exposure {source} "
    return stored(bench.clean.with_counts(counts), target, remark)


def saved_twice(bench: Bench, rng: np.random.Generator) -> Planted:
    """An earlier step's image saved under a later step's label."""
    steps = np.sort(rng.choice(bench.clean.exposures("wedge"), 2, replace=False))
    return copied(bench, int(steps[1]), int(steps[0]))


def stale_image(bench: Bench, rng: np.random.Generator) -> Planted:
    """The image of the exposure before, saved again."""
    step = any_step(bench, rng, after_step=True)
    return copied(bench, step, step - 1)


def stood(bench: Bench, exposure: int, stack: NDArray[np.float64]) -> Planted:
    """Another stack stood in the beam than the file says."""
    truth = bench.clean.thickness_mm.copy()
    truth[exposure] = stack
    return on_step(
        bench, exposure, lambda w: has_stack(w, stack), true_thickness_mm=truth
    )


def not_moved(bench: Bench, rng: np.random.Generator) -> Planted:
    """The stack of the exposure before still stood in the beam."""
    step = any_step(bench, rng, after_step=True)
    return stood(bench, step, bench.clean.thickness_mm[step - 1])


def open_with_step(bench: Bench, rng: np.random.Generator) -> Planted:
    """A stack was left in the beam of an open exposure."""
    exposure = int(rng.choice(bench.clean.exposures("open")))
    return stood(bench, exposure, bench.clean.thickness_mm[any_step(bench, rng)])


def step_was_open(bench: Bench, rng: np.random.Generator) -> Planted:
    """A step that never stood in the beam."""
    return stood(bench, any_step(bench, rng), np.zeros(len(NAMES)))


def timed(bench: Bench, step: int, factor: float) -> Scan:
    """The clean scan, one exposure of which lasts longer or shorter."""
    seconds = bench.clean.count_time_s.copy()
    seconds[step] *= factor
    return replace(bench.clean, count_time_s=seconds)


def saturated(bench: Bench, rng: np.random.Generator) -> Planted:
    """A thin step counted longer, as the file says, than its counters can hold."""
    thin = (bench.clean.thickness_mm < 0.35 * LARGEST_MM).all(axis=1)
    steps = bench.clean.exposures("wedge")
    step = int(rng.choice(steps[thin[steps]]))
    limit = int(1.3 * np.quantile(bench.counts, 0.999))
    said, counts = timed(bench, step, 6.0), bench.counts
    counts[step] = np.minimum(bench.exposed([step], said=said)[0], limit)
    scan = replace(said.with_counts(counts), count_limit=limit)
    return stored(scan, step, "stand at the counter's limit")


def half_the_frames(bench: Bench, rng: np.random.Generator) -> Planted:
    """Half of an exposure's frames are missing from its sum."""
    step = any_step(bench, rng)
    short = timed(bench, step, 0.5)
    return on_step(bench, step, lambda w: near(w, "% of that", 50.0), said=short)


def rows_missing(bench: Bench, rng: np.random.Generator) -> Planted:
    """The last third of an exposure's rows was never stored."""
    step = any_step(bench, rng)
    counts = bench.counts
    counts[step, :, -(PIXELS // 3) :] = 0
    return stored(bench.clean.with_counts(counts), step, "of the pixels count nothing")


def current(off: float) -> Callable[[Bench, np.random.Generator], Planted]:
    """The tube's current was not what the file says."""

    def plant(bench: Bench, rng: np.random.Generator) -> Planted:
        step = any_step(bench, rng)
        factor = 1.0 + off * float(rng.choice([-1.0, 1.0]))
        truth = np.array(bench.clean.current_ma)
        truth[step] *= factor
        percent = 100.0 * factor
        return on_step(
            bench, step, lambda w: near(w, "% of that", percent), true_current_ma=truth
        )

    return plant


def warm_up(bench: Bench, _: np.random.Generator) -> Planted:
    """Five per cent of the tube's output are missing at first."""
    tube = replace(TUBE, warm_up=0.05, warm_up_exposures=6.0)
    everything = np.arange(bench.clean.shape[0])
    late = 1.0 - 0.05 * np.exp(-everything[2:-1] / 6.0)
    change = 100 * (late[-3:].mean() / late[:3].mean() - 1.0)
    # the random walk that the tube takes besides, over the scan
    walk = 100 * DRIFT_STEP * np.sqrt(everything.size)

    def named(_: dict[int, str], trends: list[str]) -> int:
        found = re.search(r"output changed by ([-+][\d.]+) %", " ".join(trends))
        return int(found is not None and abs(float(found[1]) - change) < WITHIN * walk)

    counts = bench.exposed(everything, tube=tube)
    return Planted(scan=bench.clean.with_counts(counts), faulty=(), named=named)


def polarisation(bench: Bench, _: np.random.Generator) -> Planted:
    """All thresholds sink by 0.3 keV in the course of the scan."""
    everything = np.arange(bench.clean.shape[0])
    drift = np.linspace(0.0, -0.3, everything.size)
    change = float(drift[-2] - drift[2])
    counts = bench.exposed(everything, threshold_drift_kev=drift)
    return Planted(
        scan=bench.clean.with_counts(counts),
        faulty=(),
        named=lambda _, trends: int(near(" ".join(trends), "keV from", change)),
    )


def lit_dark(bench: Bench, rng: np.random.Generator) -> Planted:
    """The beam was on in a dark exposure."""
    dark = int(rng.choice(bench.clean.exposures("dark")))
    counts = bench.counts
    counts[dark] = counts[2] + rng.integers(0, 50, counts[2].shape)
    return stored(bench.clean.with_counts(counts), dark, "dark exposure counts")


def other_thresholds(bench: Bench, rng: np.random.Generator) -> Planted:
    """All thresholds stood 1 keV higher or lower in one exposure."""
    step = any_step(bench, rng)
    drift = np.zeros(bench.clean.shape[0])
    drift[step] = shift = float(rng.choice([-1.0, 1.0]))
    return on_step(
        bench, step, lambda w: near(w, "keV from", shift), threshold_drift_kev=drift
    )


KINDS: dict[str, Callable[[Bench, np.random.Generator], Planted]] = {
    "thickness off by 5 %": thickness(0.05),
    "thickness off by 20 %": thickness(0.20),
    "materials exchanged": materials_exchanged,
    "two steps swapped": swapped,
    "step saved twice": saved_twice,
    "stale image": stale_image,
    "wedge not moved": not_moved,
    "saturated": saturated,
    "half the frames missing": half_the_frames,
    "rows missing": rows_missing,
    "current off by 4 %": current(0.04),
    "current off by 30 %": current(0.30),
    "open with a step in it": open_with_step,
    "step that was open": step_was_open,
    "warm-up of 5 %": warm_up,
    "polarisation, 0.3 keV": polarisation,
    "dark with the beam on": lit_dark,
    "thresholds off by 1 keV": other_thresholds,
}
