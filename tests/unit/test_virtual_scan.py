"""Simulated scans: repeatable, complete, and true to what they say of themselves."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan
from spectral.virtual.detector import (
    BadPixelShares,
    PixelSpread,
    VirtualDetector,
    VirtualSensor,
)
from spectral.virtual.pixels import PixelKind
from spectral.virtual.pulse_library import (
    PulseLibrary,
    build_library,
    energy_borders,
)
from spectral.virtual.tube import VirtualTube, open_spectrum
from spectral.virtual.virtual_scan import VirtualScan, simulate_scan

if TYPE_CHECKING:
    from numpy.typing import NDArray

SENSOR = VirtualSensor(
    material="CdTe",
    density_g_cm3=5.85,
    thickness_um=1000.0,
    pitch_um=110.0,
    bias_v=500.0,
    pair_energy_ev=4.43,
    fano=0.1,
    relative_permittivity=10.9,
)
DETECTOR = VirtualDetector(
    name="made up",
    sensor=SENSOR,
    thresholds_kev=(20.0, 35.0, 50.0),
    noise_kev=1.5,
    dead_time_ns=60.0,
    spread=PixelSpread(threshold_kev=0.4, gain=0.01, area=0.02, dead_time=0.05),
)
TUBE = VirtualTube(photons_per_mas=1e5, drift_step=0.002)
ROLES = ("dark", "open", "open", "wedge", "object")
ROWS, COLUMNS = 20, 6


@pytest.fixture(scope="module")
def library() -> PulseLibrary:
    return build_library(
        SENSOR, energy_borders(70.0), seed=2, photons_per_bin=1000, keep_events=True
    )


@pytest.fixture
def template() -> Scan:
    n = len(ROLES)
    thickness = np.zeros((n, 2))
    thickness[3] = 20.0, 1.0
    thickness[4] = np.nan
    return Scan(
        counts=CountsInMemory(np.zeros((n, 3, ROWS, COLUMNS), np.uint32)),
        thresholds_kev=np.array(DETECTOR.thresholds_kev),
        role=ROLES,
        thickness_mm=thickness,
        materials=(
            Layer(name="PMMA", formula="PMMA", density_g_cm3=1.19),
            Layer(name="Al", formula="Al", density_g_cm3=2.7),
        ),
        count_time_s=np.full(n, 0.05),
        current_ma=np.array([0.0, 1.0, 0.5, 1.0, 1.0]),
        voltage_kv=70.0,
        filters=(Filter(material="Al", thickness_mm=2.0),),
        pixel_mask=np.zeros((ROWS, COLUMNS), np.uint32),
        digest="of something else",
    )


def thing(value: float = 1.0) -> NDArray[np.float64]:
    """An object that changes from column to column."""
    across = np.linspace(0.5, 2.0, COLUMNS)
    return value * np.broadcast_to(across, (2, ROWS, COLUMNS)).copy()


def counts(result: VirtualScan) -> NDArray[np.int64]:
    return result.scan.counts.read(range(len(ROLES))).astype(np.int64)


@pytest.mark.parametrize("together", [False, True])
def test_same_seed_same_counts_whatever_the_threads(
    template: Scan, library: PulseLibrary, together: bool
) -> None:
    def run(seed: int, threads: int) -> NDArray[np.int64]:
        result = simulate_scan(
            template,
            DETECTOR,
            TUBE,
            seed=seed,
            object_areal_density=thing(),
            correlated_neighbours=together,
            library=library,
            threads=threads,
        )
        return counts(result)

    first = run(7, 1)
    assert np.array_equal(first, run(7, 2))
    assert not np.array_equal(first, run(8, 2))


def test_bands_of_rows_do_not_show(template: Scan, library: PulseLibrary) -> None:
    # a detector cut after 17 rows, another band, has the same counts where no
    # neighbour is missing and the pixels are the same
    plain = replace(DETECTOR, spread=PixelSpread())
    steady = replace(TUBE, drift_step=0.0)
    tall = simulate_scan(
        template, plain, steady, seed=3, object_areal_density=thing(),
        correlated_neighbours=True, library=library,
    )  # fmt: skip
    cut = replace(
        template,
        counts=CountsInMemory(np.zeros((len(ROLES), 3, 17, COLUMNS), np.uint32)),
        pixel_mask=np.zeros((17, COLUMNS), np.uint32),
    )
    short = simulate_scan(
        cut, plain, steady, seed=3, object_areal_density=thing()[:, :17],
        correlated_neighbours=True, library=library,
    )  # fmt: skip
    assert np.array_equal(counts(tall)[:, :, :17], counts(short))


def test_counts_fall_with_threshold_and_with_what_stands_in_the_beam(
    template: Scan, library: PulseLibrary
) -> None:
    result = simulate_scan(
        template, DETECTOR, TUBE, seed=1, object_areal_density=thing(), library=library
    )
    found = counts(result)
    assert found[0].sum() == 0
    assert np.all(np.diff(found[1:], axis=1) <= 0)
    mean = found.mean(axis=(2, 3))
    assert np.all(mean[1] > mean[3])
    assert np.all(np.diff(found[4, 0].mean(axis=0)) < 0.0)
    # half the current, less pile-up
    assert 0.49 < mean[2, 0] / mean[1, 0] < 0.52
    assert result.scan.digest == ""
    assert result.scan.sensor_material == "CdTe"
    assert result.scan.pixel_size_um == (110.0, 110.0)
    assert result.areal_density[3].tolist() == pytest.approx([2.38, 0.27])
    assert np.all(np.isnan(result.areal_density[4]))


def test_expected_counts_follow_from_the_library(
    template: Scan, library: PulseLibrary
) -> None:
    # few photons, no spread, no noise: counts are photons x response, but for pile-up
    # of about rate x dead time
    plain = replace(DETECTOR, spread=PixelSpread(), noise_kev=0.0, dead_time_ns=1.0)
    steady = VirtualTube(photons_per_mas=1e5)
    result = simulate_scan(
        template, plain, steady, seed=1, object_areal_density=thing(), library=library
    )
    spectrum = open_spectrum(template, steady, library.borders_kev)
    expected = 1e5 * 0.05 * spectrum @ library.response(template.thresholds_kev)
    found = counts(result)[1].mean(axis=(1, 2))
    error = (expected / (ROWS * COLUMNS)) ** 0.5
    np.testing.assert_array_less(np.abs(found - expected), 4 * error + 1e-3 * expected)


def test_bad_pixels_misbehave_as_their_kind_says(
    template: Scan, library: PulseLibrary
) -> None:
    bad = BadPixelShares(dead=0.1, stuck=0.1, noisy=0.1, unstable=0.2, broken_columns=1)
    detector = replace(DETECTOR, bad_pixels=bad)
    result = simulate_scan(
        template, detector, TUBE, seed=5, object_areal_density=thing(), library=library
    )
    found, kind = counts(result), result.pixels.kind
    for silent in (PixelKind.DEAD, PixelKind.BROKEN_COLUMN):
        assert (kind == silent).any()
        assert found[:, :, kind == silent].sum() == 0
    stuck = found[:, :, kind == PixelKind.STUCK]
    assert np.all(stuck == stuck[:1, :1])
    noisy = found[0][:, kind == PixelKind.NOISY]
    assert noisy[0].max() > 100
    assert np.all(np.diff(noisy, axis=0) <= 0)
    assert found[0][:, kind == PixelKind.GOOD].sum() == 0
    unstable = (found[1] / np.maximum(found[2], 1))[0, kind == PixelKind.UNSTABLE]
    steady = (found[1] / np.maximum(found[2], 1))[0, kind == PixelKind.GOOD]
    assert unstable.std() > 2.0 * steady.std()


def test_planted_faults_show(template: Scan, library: PulseLibrary) -> None:
    def mean(**faults: NDArray[np.float64]) -> NDArray[np.float64]:
        result = simulate_scan(
            template, DETECTOR, VirtualTube(photons_per_mas=1e5), seed=1,
            object_areal_density=thing(), library=library,
            threshold_drift_kev=faults.get("drift"),
            true_current_ma=faults.get("current"),
            true_thickness_mm=faults.get("thickness"),
        )  # fmt: skip
        return np.asarray(counts(result).mean(axis=(2, 3)))

    sound = mean()
    drifted = mean(drift=np.array([0.0, 0.0, 0.0, 2.0, 0.0]))
    assert np.all(drifted[3] < 0.98 * sound[3])
    assert np.array_equal(drifted[[1, 2, 4]], sound[[1, 2, 4]])
    weaker = mean(current=np.array([0.0, 1.0, 0.5, 0.8, 1.0]))
    assert np.all(weaker[3] < 0.85 * sound[3])
    wrong = template.thickness_mm.copy()
    wrong[3] = 30.0, 1.0
    assert np.all(mean(thickness=wrong)[3] < 0.9 * sound[3])


def test_heel_tilts_and_hardens(template: Scan, library: PulseLibrary) -> None:
    tilted = replace(TUBE, heel=-0.2, heel_tungsten_um=5.0)
    result = simulate_scan(
        template, replace(DETECTOR, spread=PixelSpread()), tilted, seed=1,
        object_areal_density=thing(), library=library,
    )  # fmt: skip
    rows = counts(result)[1].mean(axis=2)
    assert rows[0, -5:].mean() < 0.85 * rows[0, :5].mean()
    harder = rows[2] / rows[0]
    assert harder[-5:].mean() > harder[:5].mean()


def test_counter_stops_at_its_largest_value(
    template: Scan, library: PulseLibrary
) -> None:
    result = simulate_scan(
        template, replace(DETECTOR, counter_bits=8), TUBE, seed=1,
        object_areal_density=thing(), library=library,
    )  # fmt: skip
    assert counts(result).max() == 255
    assert result.scan.count_limit == 255


def test_progress_is_told_to_its_end(template: Scan, library: PulseLibrary) -> None:
    told: list[tuple[int, int]] = []
    simulate_scan(
        template, DETECTOR, TUBE, seed=1, object_areal_density=thing(0.1),
        library=library, progress=lambda done, whole: told.append((done, whole)),
    )  # fmt: skip
    pixels = len(ROLES) * ROWS * COLUMNS
    assert told[-1] == (pixels, pixels)
    assert told == sorted(told)
    assert len(told) > len(ROLES)


def test_exposures_on_demand_are_those_of_the_whole_scan(
    template: Scan, library: PulseLibrary
) -> None:
    whole, single = (
        simulate_scan(
            template,
            DETECTOR,
            TUBE,
            seed=4,
            object_areal_density=thing(),
            library=library,
            on_demand=on_demand,
        ).scan.counts
        for on_demand in (False, True)
    )
    assert single.shape == whole.shape
    for i in (3, 1, 1):
        assert np.array_equal(single.read([i]), whole.read([i]))


def test_photons_too_many_to_follow_are_refused(
    template: Scan, library: PulseLibrary
) -> None:
    bright = VirtualTube(photons_per_mas=4e9)
    words = (
        r"exposure 1 \(open\) would send 2e\+08 photons upon a pixel, .* up to 1e\+08"
    )
    with pytest.raises(InputError, match=words):
        simulate_scan(
            template, DETECTOR, bright, seed=1, library=library,
            object_areal_density=thing(),
        )  # fmt: skip
    behind = replace(
        template,
        role=("dark", "wedge", "wedge", "wedge", "wedge"),
        thickness_mm=np.full((len(ROLES), 2), 80.0),
    )
    dim = simulate_scan(
        behind, DETECTOR, bright, seed=1, library=library, on_demand=True
    )
    assert dim.scan.shape == template.shape


def test_a_scan_builds_its_own_library(template: Scan) -> None:
    small = replace(
        template,
        counts=CountsInMemory(np.zeros((2, 3, 2, 2), np.uint32)),
        role=("dark", "open"),
        thickness_mm=np.zeros((2, 2)),
        count_time_s=np.full(2, 0.01),
        current_ma=np.array([0.0, 1.0]),
        pixel_mask=np.zeros((2, 2), np.uint32),
    )
    result = simulate_scan(small, DETECTOR, TUBE, seed=1)
    assert result.scan.counts.read([1]).min() > 0


def test_scans_that_cannot_be(template: Scan, library: PulseLibrary) -> None:
    def run(scan: Scan = template, **options: NDArray[np.float64]) -> None:
        simulate_scan(scan, DETECTOR, TUBE, seed=1, library=library, **options)  # type: ignore[arg-type]

    with pytest.raises(InputError, match="current_ma is missing"):
        run(replace(template, current_ma=None))
    with pytest.raises(InputError, match=r"exposure 4 \(object\): nothing says what"):
        run()
    with pytest.raises(InputError, match=r"object_areal_density has shape \(2, 3, 3\)"):
        run(object_areal_density=np.ones((2, 3, 3)))
    with pytest.raises(InputError, match=r"threshold_drift_kev has shape \(2,\)"):
        run(object_areal_density=thing(), threshold_drift_kev=np.zeros(2))
    with pytest.raises(InputError, match=r"true_current_ma has shape \(1,\)"):
        run(object_areal_density=thing(), true_current_ma=np.ones(1))
