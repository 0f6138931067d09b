"""The forward model against a detector that counts event by event.

For each detector description: a wedge scan is simulated and calibrated on, then the
expected counts at three rates times three stacks that no step repeats are compared
with a second scan of the same pixels, before and after calibration. A third scan, of
an object with known regions, scores the decomposition.

    python tests/benchmarks/witness_table.py [DETECTOR ...] [--pixels 24] [--json FILE]

DETECTOR is silicon, gaas or cdte; all by default.
"""

from __future__ import annotations

import argparse
import json
import sys
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from time import perf_counter
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.calibration.nuisance import population_nuisances
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import (
    PixelDepartures,
    curve_tables,
    expected_above,
)
from spectral.forward.setup import Setup
from spectral.scans.scan import Filter, Scan
from spectral.scans.script import NoCounts
from spectral.virtual.detector import BadPixelShares, read_detector
from spectral.virtual.pulse_library import build_library, energy_borders
from spectral.virtual.tube import VirtualTube
from spectral.virtual.virtual_scan import VirtualScan, simulate_scan
from spectral.virtual.wedge_description import read_wedge

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration
    from spectral.virtual.detector import VirtualDetector
    from spectral.virtual.pulse_library import PulseLibrary

CALIBRATIONS = Path(__file__).resolve().parents[2] / "calibrations"
SEED = 5
FULL_MA = 4.0
WITNESS_MA = (0.8, 2.0, 4.0)
PHOTONS = 20_000.0
"""Upon each pixel in an open exposure of the wedge scan at full current."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Bench:
    """One detector with the tube setting and the stacks to test it on.

    `loss` is the open rate times the dead time at full current, `step_time` the count
    time of a wedge step relative to an open exposure.
    """

    detector: str
    wedge: str
    voltage_kv: float
    filter_mm_al: float
    witness_mm: tuple[tuple[float, float], ...]
    regions_mm: tuple[tuple[float, float], ...]
    loss: float
    step_time: float = 1.0


_POLYMER_ALUMINIUM = {
    "wedge": "wedge_pmma_aluminium",
    "witness_mm": ((0.0, 0.0), (30.0, 1.5), (50.0, 5.0)),
    "regions_mm": tuple((p, a) for p in (15.0, 30.0, 50.0) for a in (0.5, 2.0, 5.0)),
}
BENCHES = (
    Bench(
        detector="silicon", voltage_kv=50.0, filter_mm_al=1.0, loss=0.15,
        step_time=6.0,
        **_POLYMER_ALUMINIUM,  # type: ignore[arg-type]
    ),
    Bench(
        detector="gaas", voltage_kv=70.0, filter_mm_al=2.0, loss=0.2,
        **_POLYMER_ALUMINIUM,  # type: ignore[arg-type]
    ),
    Bench(
        detector="cdte", voltage_kv=90.0, filter_mm_al=2.0, loss=0.25,
        **_POLYMER_ALUMINIUM,  # type: ignore[arg-type]
    ),
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class WitnessRow:
    """Expected over counted, less 1, in percent, by bin."""

    detector: str
    current_ma: float
    loss: float
    stack_mm: tuple[float, float]
    before: tuple[float, ...]
    after: tuple[float, ...]
    error: tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class ChainRow:
    """How well one material of one detector is found, over the object's regions.

    Attributes
    ----------
    largest_bias, typical_bias : float
        Of a region's mean, over the reported error of one pixel in one exposure.
    mean_pull : float
        Root mean square of region bias over the reported error of that mean.
    repeat_ratio : float
        Scatter between repeats over reported error, root mean square.
    rmse_over_bound : float
        Root mean square error of single estimates over the Cramer-Rao bound.
    flagged : float
    """

    detector: str
    material: str
    largest_bias: float
    typical_bias: float
    mean_pull: float
    repeat_ratio: float
    rmse_over_bound: float
    flagged: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Instrument:
    """A virtual detector with its tube and pulses, ready to scan."""

    bench: Bench
    detector: VirtualDetector
    tube: VirtualTube
    library: PulseLibrary
    full_s: float
    pixels: int

    @classmethod
    def build(cls, bench: Bench, *, pixels: int) -> Instrument:
        """Choose flux and time so that rate and counts are as the bench says."""
        detector = read_detector(CALIBRATIONS / f"detector_{bench.detector}.toml")
        detector = replace(detector, bad_pixels=BadPixelShares())
        borders = energy_borders(bench.voltage_kv)
        library = build_library(detector.sensor, borders, seed=SEED)
        # one short exposure of a few pixels tells the pulses per photon
        probe = cls(
            bench=bench, detector=detector, tube=VirtualTube(photons_per_mas=1e3),
            library=library, full_s=1.0, pixels=6,
        )  # fmt: skip
        seen = probe.scan(["open"], [(0.0, 0.0)], [FULL_MA], [1.0], seed=1).scan
        per_photon = float(seen.counts.read([0])[0, 0].mean()) / (1e3 * FULL_MA)
        photons_per_s = bench.loss / (1e-9 * detector.dead_time_ns * per_photon)
        return cls(
            bench=bench,
            detector=detector,
            tube=VirtualTube(photons_per_mas=photons_per_s / FULL_MA),
            library=library,
            full_s=PHOTONS / per_photon / photons_per_s,
            pixels=pixels,
        )

    def scan(
        self,
        role: Sequence[str],
        stacks_mm: Sequence[tuple[float, float]],
        current_ma: Sequence[float],
        time_s: Sequence[float],
        *,
        seed: int,
        object_mm: NDArray[np.float64] | None = None,
    ) -> VirtualScan:
        """A scan of the bench's basis materials."""
        bench, thresholds = self.bench, self.detector.thresholds_kev
        materials = read_wedge(CALIBRATIONS / f"{bench.wedge}.toml").materials
        thickness = np.array(stacks_mm, np.float64)
        thickness[[r == "object" for r in role]] = np.nan
        density = np.array([m.density_g_cm3 for m in materials])
        areal = None
        if object_mm is not None:
            areal = 0.1 * object_mm * density[:, None, None]
        shape = (len(role), len(thresholds), self.pixels, self.pixels)
        return simulate_scan(
            Scan(
                counts=NoCounts(shape),
                thresholds_kev=np.array(thresholds),
                role=tuple(role),
                thickness_mm=thickness,
                materials=materials,
                count_time_s=np.array(time_s, np.float64),
                current_ma=np.array(current_ma, np.float64),
                voltage_kv=bench.voltage_kv,
                filters=(Filter(material="Al", thickness_mm=bench.filter_mm_al),),
                pixel_mask=np.zeros(shape[2:], np.uint32),
                title=f"{bench.detector}, invented",
            ),
            self.detector,
            self.tube,
            seed=seed,
            detector_seed=SEED,
            library=self.library,
            object_areal_density=areal,
        )

    def wedge_scan(self) -> VirtualScan:
        """Darks, opens at three currents, and all stacks of the wedge's description."""
        wedge = read_wedge(CALIBRATIONS / f"{self.bench.wedge}.toml")
        order = np.random.default_rng(4).permutation(len(wedge.thickness_mm))
        opens = ((FULL_MA, 1.0), (FULL_MA, 1.0), (2.0, 2.0), (0.8, 3.0))
        rows = [("dark", (0.0, 0.0), 0.0, 1.0)] * 2
        rows += [("open", (0.0, 0.0), ma, t) for ma, t in opens]
        rows += [
            ("wedge", (float(p), float(a)), FULL_MA, self.bench.step_time)
            for p, a in wedge.thickness_mm[order]
        ]
        rows += [("open", (0.0, 0.0), ma, t) for ma, t in opens[1:]]
        role, stacks, current, time = zip(*rows, strict=True)
        seconds = [t * self.full_s for t in time]
        return self.scan(role, stacks, current, seconds, seed=SEED + 1)


def witness_rows(
    instrument: Instrument,
    calibration: Calibration,
    *,
    counts: float = 8.0,
) -> list[WitnessRow]:
    """Expected against counted, at every rate and stack.

    Parameters
    ----------
    instrument : Instrument
    calibration : Calibration
    counts : float
        Time of each exposure relative to an open exposure of the wedge scan at full
        current; thick stacks and small currents are given more.
    """
    bench = instrument.bench
    cases = [(ma, s) for ma in WITNESS_MA for s in bench.witness_mm]
    longer = [counts * FULL_MA / ma * (1.0 if not any(s) else 3.0) for ma, s in cases]
    seen = instrument.scan(
        ["open" if not any(s) else "wedge" for _, s in cases],
        [s for _, s in cases],
        [ma for ma, _ in cases],
        [instrument.full_s * t for t in longer],
        seed=SEED + 2,
    )
    scan = seen.scan
    counted = counts_to_bins(
        scan.counts.read(range(len(cases))).astype(np.float64).mean(axis=(2, 3))
    )
    error = 100.0 / np.sqrt(counted * instrument.pixels**2)
    current = np.array([ma for ma, _ in cases])
    flat = np.flatnonzero(calibration.good.ravel())
    after = calibration.expected_bins(
        scan.areal_density, current, np.ones(current.size), flat
    ).mean(axis=0)
    before = nominal_bins(instrument, seen)
    time = scan.count_time_s[:, None]
    good = scan.counts.read(range(len(cases)))[..., calibration.good].mean(axis=2)
    counted_good = counts_to_bins(good.astype(np.float64))
    return [
        WitnessRow(
            detector=bench.detector,
            current_ma=ma,
            loss=bench.loss * ma / FULL_MA,
            stack_mm=stack,
            before=_percent(before[i] * time[i] / counted[i]),
            after=_percent(after[i] * time[i] / counted_good[i]),
            error=tuple(error[i].tolist()),
        )
        for i, (ma, stack) in enumerate(cases)
    ]


def _percent(ratio: NDArray[np.float64]) -> tuple[float, ...]:
    return tuple((100.0 * (ratio - 1.0)).tolist())


def nominal_bins(instrument: Instrument, seen: VirtualScan) -> NDArray[np.float64]:
    """Counts per second and bin by the model as it starts: priors' means.

    Flux, area and thresholds of the pixels are the true ones, so that what is left is
    the physics of tube, sensor and pile-up. Shape (case, bin).
    """
    scan, pixels = seen.scan, seen.pixels
    setup = Setup.from_scan(scan)
    start = {n.name: n.start for n in population_nuisances(len(scan.thresholds_kev))}
    model = setup.model(start)
    assert scan.current_ma is not None
    rate = instrument.tube.photons_per_mas * scan.current_ma
    tables = curve_tables(model, scan.areal_density, rate)
    shift = pixels.thresholds_kev / pixels.gain - scan.thresholds_kev[:, None, None]
    count = pixels.area.size
    values = np.zeros((count, len(scan.thresholds_kev) + 3))
    values[:, 0] = np.log(pixels.area).ravel()
    values[:, 1:-2] = shift.reshape(len(shift), -1).T
    above, _ = expected_above(
        tables, scan.thresholds_kev, PixelDepartures(values=values)
    )
    return np.asarray(counts_to_bins(above).mean(axis=0))


def chain_rows(
    instrument: Instrument, calibration: Calibration, *, repeats: int = 12
) -> list[ChainRow]:
    """Score the decomposition on an object of nine regions."""
    side = instrument.pixels
    third = np.minimum(np.arange(side) * 3 // side, 2)
    region = 3 * third[:, None] + third[None, :]
    layers = np.moveaxis(np.array(instrument.bench.regions_mm)[region], 2, 0)
    role = ["dark", "open", "open", *["object"] * repeats, "open", "open"]
    nothing = [(0.0, 0.0)] * len(role)
    current = [0.0, *[FULL_MA] * (len(role) - 1)]
    time = [instrument.full_s] * len(role)
    seen = instrument.scan(
        role, nothing, current, time, seed=SEED + 3, object_mm=layers
    )
    maps = MaterialDecomposer(calibration).decompose(seen.scan)
    truth = seen.object_areal_density
    assert truth is not None
    usable = maps.flags == 0
    value = maps.areal_density.astype(np.float64)
    rows = []
    for m, material in enumerate(maps.material):
        single = maps.areal_density_errors[:, m].astype(np.float64)
        own = maps.calibration_errors[:, m].astype(np.float64)
        away = value[:, m] - truth[m]
        bias, pull = [], []
        for index in range(9):
            chosen = usable & (region == index)
            if not chosen.any():
                continue
            mean = away[chosen].mean()
            pixels = max(int(chosen.any(axis=0).sum()), 1)
            error = np.sqrt(
                np.mean(single[chosen] ** 2) / chosen.sum()
                + np.mean(own[chosen] ** 2) / pixels
            )
            bias.append(mean / np.sqrt(np.mean(single[chosen] ** 2)))
            pull.append(mean / error)
        full = usable.all(axis=0)
        scatter = value[:, m][:, full].var(axis=0, ddof=1)
        reported = (single[:, full] ** 2).mean(axis=0)
        rmse = np.sqrt(np.mean(away[usable] ** 2) / np.mean(single[usable] ** 2))
        rows.append(
            ChainRow(
                detector=instrument.bench.detector,
                material=material,
                largest_bias=float(np.max(np.abs(bias))),
                typical_bias=float(np.sqrt(np.mean(np.square(bias)))),
                mean_pull=float(np.sqrt(np.mean(np.square(pull)))),
                repeat_ratio=float(np.sqrt((scatter / reported).mean())),
                rmse_over_bound=float(rmse),
                flagged=float(1.0 - usable.mean()),
            )
        )
    return rows


def run(bench: Bench, *, pixels: int = 24) -> tuple[list[WitnessRow], list[ChainRow]]:
    """Everything of one detector."""
    instrument = Instrument.build(bench, pixels=pixels)
    wedge = instrument.wedge_scan()
    calibration = WedgeCalibrator(leave_out=False).fit(wedge.scan).calibration_
    return witness_rows(instrument, calibration), chain_rows(instrument, calibration)


def witness_text(rows: Sequence[WitnessRow]) -> str:
    """The table in Markdown: a line for each detector and rate, a column a stack."""
    stacks = list(dict.fromkeys(r.stack_mm for r in rows))
    named = [
        f"after, {p:g} mm + {a:g} mm" if p + a else "after, open" for p, a in stacks
    ]
    lines = _heading(
        ("detector", "rate x dead time", "before, largest", *named, "statistical")
    )
    for key in dict.fromkeys((r.detector, r.loss) for r in rows):
        own = [r for r in rows if (r.detector, r.loss) == key]
        before = max((v for r in own for v in r.before), key=abs)
        cells = [
            key[0],
            f"{key[1]:.2f}",
            f"{before:+.0f}",
            *(", ".join(f"{v:+.2f}" for v in r.after) for r in own),
            f"{max(v for r in own for v in r.error):.2f}",
        ]
        lines.append(f"| {' | '.join(cells)} |")
    return "\n".join(lines)


def _heading(titles: tuple[str, ...]) -> list[str]:
    return [f"| {' | '.join(titles)} |", "|" + "---|" * len(titles)]


def chain_text(rows: Sequence[ChainRow]) -> str:
    """The score in Markdown."""
    titles = (
        "detector", "material", "region bias / one-pixel error: rms, largest",
        "region bias / its own error, rms", "repeat scatter / reported",
        "RMSE / bound", "flagged",
    )  # fmt: skip
    lines = _heading(titles)
    lines += [
        f"| {r.detector} | {r.material} | {r.typical_bias:.3f}, {r.largest_bias:.3f} | "
        f"{r.mean_pull:.2f} | {r.repeat_ratio:.3f} | {r.rmse_over_bound:.3f} | "
        f"{100 * r.flagged:.1f} % |"
        for r in rows
    ]
    return "\n".join(lines)


def main() -> None:
    """Make the tables of the detectors named."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("detector", nargs="*", default=[b.detector for b in BENCHES])
    parser.add_argument("--pixels", type=int, default=24)
    parser.add_argument("--json", type=Path, dest="json_path")
    options = parser.parse_args()
    witness: list[WitnessRow] = []
    chain: list[ChainRow] = []
    for bench in BENCHES:
        if bench.detector in options.detector:
            start = perf_counter()
            found = run(bench, pixels=options.pixels)
            witness += found[0]
            chain += found[1]
            sys.stderr.write(f"{bench.detector}: {perf_counter() - start:.0f} s\n")
    sys.stdout.write(f"{witness_text(witness)}\n\n{chain_text(chain)}\n")
    if options.json_path is not None:
        text = {
            "witness": [asdict(r) for r in witness],
            "chain": [asdict(r) for r in chain],
        }
        options.json_path.write_text(json.dumps(text, indent=1), encoding="utf-8")


if __name__ == "__main__":
    main()
