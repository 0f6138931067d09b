"""What the examples share: their options, their files, and means over regions."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from spectral.demo.region_mean import mean_of_repeats, region_mean
from spectral.demo.rehearsal import Rehearsal
from spectral.scans.flags import PixelFlag
from spectral.scans.maps import Maps
from spectral.scans.script import open_scan

EXAMPLES = Path(__file__).resolve().parents[2] / "examples"
SHAPE = (4, 6, 8)


@pytest.fixture
def maps() -> Maps:
    """Two materials, four repeats; one pixel never good, one bad once."""
    rng = np.random.default_rng(5)
    error = np.broadcast_to(np.array([0.4, 0.1])[:, None, None], (4, 2, 6, 8))
    common = 0.5 * error
    flags = np.zeros(SHAPE, np.uint16)
    flags[:, 1, 1] = int(PixelFlag.BAD_PIXEL)
    flags[2, 3, 4] = int(PixelFlag.MISFIT)
    density = 2.0 + error * rng.normal(size=error.shape)
    density[2, :, 3, 4] = 1e6
    density[:, :, 1, 1] = np.nan
    zero = np.zeros(SHAPE, np.float32)
    return Maps(
        material=("PMMA", "Al"),
        exposure=np.arange(4, dtype=np.int32),
        areal_density=density.astype(np.float32),
        areal_density_errors=error.astype(np.float32),
        covariance=np.stack([zero] * 3, axis=1),
        calibration_errors=common.astype(np.float32),
        deviance=zero,
        flags=flags,
        process={},
    )


def test_a_region_is_averaged_without_its_flagged_estimates(maps: Maps) -> None:
    inside = np.zeros(SHAPE[1:], bool)
    inside[:, :5] = True
    found = region_mean(maps, inside, 0)
    assert found is not None
    good = (maps.flags == 0) & inside
    assert good.sum() == 4 * 30 - 4 - 1
    assert found.value == pytest.approx(
        maps.areal_density[:, 0][good].mean(dtype=np.float64)
    )
    # 115 estimates share the counting error, 29 pixels the calibration's
    assert found.error == pytest.approx(np.sqrt(0.4**2 / 115 + 0.2**2 / 29), rel=1e-6)
    assert found.single_error == pytest.approx(0.4)
    assert found.flagged == pytest.approx(5 / 120)


def test_a_region_without_estimates_has_no_mean(maps: Maps) -> None:
    inside = np.zeros(SHAPE[1:], bool)
    assert region_mean(maps, inside, 0) is None
    inside[1, 1] = True
    assert region_mean(maps, inside, 0) is None


def test_repeats_are_averaged_where_they_are_good(maps: Maps) -> None:
    mean = mean_of_repeats(maps, 1)
    assert np.isnan(mean[1, 1])
    assert np.isfinite(mean).sum() == 6 * 8 - 1
    some = maps.areal_density[[0, 1, 3], 1, 3, 4]
    assert mean[3, 4] == pytest.approx(float(some.mean()), rel=1e-6)


def test_the_words_of_an_example() -> None:
    plain = Rehearsal.from_words("text", folder="here", words=[])
    assert plain == Rehearsal(folder=Path("here"))
    assert plain.calibrator().leave_out
    words = ["--out", "there", "--pixels", "8", "12", "--quick"]
    quick = Rehearsal.from_words("text", folder="here", words=words)
    assert quick == Rehearsal(folder=Path("there"), pixels=(8, 12), quick=True)
    assert not quick.calibrator().leave_out


@pytest.mark.slow
def test_a_rehearsed_scan_is_that_of_its_file(tmp_path: Path) -> None:
    rehearsal = Rehearsal(folder=tmp_path / "new", pixels=(4, 6))
    made = rehearsal.scan(EXAMPLES / "iodine_vials" / "rack.toml")
    file = tmp_path / "new" / "rack.h5"
    assert made.scan.source == str(file)
    kept = open_scan(file)
    assert kept.shape == made.scan.shape
    assert made.scan.shape[2:] == (4, 6)
    assert made.truth.region.shape == (4, 6)
    np.testing.assert_array_equal(kept.counts.read([3]), made.scan.counts.read([3]))
