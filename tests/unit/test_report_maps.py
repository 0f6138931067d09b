"""The page about maps: what it sums up, what it says, what it warns of."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
from scipy.stats import chi2

from spectral.errors import FileFormatError, InputError
from spectral.reporting import maps_blocks
from spectral.reporting.maps_blocks import MapsBlocks
from spectral.reporting.maps_page import degrees_of_freedom
from spectral.reporting.maps_pictures import thinned
from spectral.reporting.maps_record import numbers_in, plain_entry
from spectral.reporting.maps_summary import (
    DEVIANCE_EDGES,
    quartile_errors,
    summarise,
)
from spectral.reporting.maps_tables import scatter_ratio
from spectral.reporting.report import report_page, write_report
from spectral.scans.flags import MEANING, PixelFlag
from spectral.scans.maps import Maps
from spectral.scans.maps_file import write_maps

if TYPE_CHECKING:
    from pathlib import Path

N, M, Y, X = 6, 2, 18, 25
FREEDOM = 3


def make_maps(*, exposures: int = N, scatter: float = 1.0) -> Maps:
    rng = np.random.default_rng(8)
    error = np.array([0.1, 0.04])[:, None, None] * np.linspace(0.8, 1.2, X)
    error = np.broadcast_to(error, (exposures, M, Y, X))
    truth = np.array([3.0, 0.5])[:, None, None] + np.linspace(0.0, 1.0, Y)[:, None]
    density = truth + scatter * error * rng.normal(size=error.shape)
    flags = np.zeros((exposures, Y, X), np.uint16)
    density[:, :, 4, 7] = np.nan
    flags[:, 4, 7] = int(PixelFlag.BAD_PIXEL)
    flags[1:2, 2, 2] = int(PixelFlag.MISFIT | PixelFlag.OUTSIDE_DOMAIN)
    density[0, 0, 9, 9] = np.nan
    flags[0, 9, 9] = int(PixelFlag.NOT_CONVERGED)
    covariance = np.stack(
        [error[:, 0] ** 2, -0.6 * error[:, 0] * error[:, 1], error[:, 1] ** 2], axis=1
    )
    deviance = rng.chisquare(FREEDOM, (exposures, Y, X)) / FREEDOM
    single = np.float32
    return Maps(
        material=("PMMA", "Al & more"),
        exposure=np.arange(4, 4 + exposures, dtype=np.int32),
        areal_density=density.astype(single),
        areal_density_errors=error.astype(single),
        covariance=covariance.astype(single),
        calibration_errors=(0.25 * error).astype(single),
        deviance=deviance.astype(single),
        flags=flags,
        process={
            "bins": "5",
            "scan": "somewhere/object.h5",
            "scan_digest": "ab" * 32,
            "calibration_digest": "cd" * 32,
            "open_counts_over_expected": "[1.0, 1.0, 1.02]",
            "assumed": json.dumps(
                {
                    "voltage_kv": 90.0,
                    "filters": ["Al 2 mm"],
                    "sensor": "CdTe",
                    "densities_g_cm3": {"PMMA": 1.19},
                    "cross_sections": "a table with a name",
                    "assumptions": ["no current was given"],
                }
            ),
            "notes": '["one open exposure only"]',
        },
    )


@pytest.fixture(scope="module")
def maps() -> Maps:
    return make_maps()


def test_the_summary_is_that_of_numpy(maps: Maps) -> None:
    found = summarise(MapsBlocks(maps))
    density = maps.areal_density.astype(np.float64)
    error = maps.areal_density_errors.astype(np.float64)
    valid = np.ones((M, Y, X), bool)
    valid[:, 4, 7] = False
    assert found.density[valid] == pytest.approx(np.nanmean(density[:, valid], axis=0))
    assert np.isnan(found.density[~valid]).all()
    assert found.scatter[valid] == pytest.approx(
        np.nanstd(density[:, valid], axis=0, ddof=1), rel=1e-6
    )
    assert found.single_error[valid] == pytest.approx(error[0][valid])
    full = valid.copy()
    full[0, 9, 9] = False
    assert found.mean_error[full] == pytest.approx(error[0][full] / np.sqrt(N))
    assert found.calibration_error[valid] == pytest.approx(0.25 * error[0][valid])
    assert found.estimates[0, 9, 9] == N - 1
    assert found.estimates[0, 4, 7] == 0
    assert found.correlation[0, 1] == pytest.approx(-0.6, abs=1e-5)
    assert found.sound_share == pytest.approx(1 - 3 / (Y * X))
    assert found.flagged_estimates[PixelFlag.BAD_PIXEL] == N
    assert found.flagged_estimates[PixelFlag.MISFIT] == 1
    assert found.flagged_share[0] == pytest.approx(2 / (Y * X))
    good = maps.deviance[maps.flags == 0]
    assert found.deviance_counts.sum() == good.size
    half = DEVIANCE_EDGES[1] / 2
    assert found.deviance_percentile(50.0) == pytest.approx(np.median(good), abs=half)
    assert found.quartiles[2, 0] == pytest.approx(
        np.nanpercentile(density[2, 0], [25, 50, 75])
    )


def test_blocks_change_nothing(
    maps: Maps, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    whole = summarise(MapsBlocks(maps))
    path = tmp_path / "maps.h5"
    write_maps(maps, path)
    monkeypatch.setattr(maps_blocks, "_BLOCK_BYTES", 1)
    blocks = MapsBlocks(path)
    assert [len(part.exposure) for part in blocks] == [1] * N
    found = summarise(blocks)
    for name in ("density", "scatter", "single_error", "deviance_counts", "quartiles"):
        assert np.array_equal(
            getattr(found, name), getattr(whole, name), equal_nan=True
        ), name


def test_one_exposure_is_shown_alone(maps: Maps) -> None:
    found = summarise(MapsBlocks(maps, exposure=6))
    assert found.exposure.tolist() == [6]
    assert np.array_equal(found.density, maps.areal_density[2], equal_nan=True)
    assert np.isnan(found.scatter).all()
    page = report_page(maps, exposure=6)
    assert page.title == "PMMA and Al & more in exposure 6 of object.h5"
    assert "From exposure to exposure" not in [s.title for s in page.sections]
    assert "error of the mean" not in page.html()
    with pytest.raises(InputError, match=r"exposure 3 is not among .* \(4 to 9\)"):
        report_page(maps, exposure=3)


def test_scatter_over_error_of_repeats() -> None:
    """Chi-square of 450 pixels x 5 degrees of freedom: 1.5 % on the ratio."""
    for true in (1.0, 1.3):
        found = summarise(MapsBlocks(make_maps(scatter=true)))
        assert scatter_ratio(found, 0) == pytest.approx(true, rel=0.06)
    few = summarise(MapsBlocks(make_maps(exposures=2)))
    assert np.isnan(scatter_ratio(few, 0))


def test_degrees_of_freedom_are_bins_minus_materials(maps: Maps) -> None:
    for bins, wanted in (("5", 3), ("2", None), ("", None), ("five", None)):
        other = replace(maps, process={"bins": bins})
        assert degrees_of_freedom(summarise(MapsBlocks(other))) == wanted


def test_the_page_says_the_figures(maps: Maps) -> None:
    page = report_page(maps)
    figures = {f.name: f for f in page.figures}
    measured = maps.flags[1] != int(PixelFlag.BAD_PIXEL)
    mean = np.nanmean(maps.areal_density[:, 0, measured].astype(float), axis=0)
    assert figures["PMMA, median pixel"].value == pytest.approx(np.median(mean))
    assert figures["PMMA, median pixel"].text.endswith("± 0.10 g/cm²")
    assert figures["PMMA, median pixel"].remark == "calibration adds ± 0.025"
    assert figures["pixels without a flag"].remark == f"{Y * X - 3} of {Y * X}"
    deviance = figures["median deviance per degree of freedom"]
    # chi-square of 3 degrees of freedom has the median 2.366 (common tables)
    assert deviance.remark == "counting alone: 0.789"
    assert deviance.value == pytest.approx(chi2.median(3) / 3, rel=0.05)
    assert "3 pixels of 450 do" in page.said[-1]
    look = " ".join(page.look)
    assert "bin 3 counts +2.00 % against the calibration" in look
    text = page.html()
    for flag, meaning in MEANING.items():
        assert str(flag.name).replace("_", " ").lower() in text
        assert meaning.replace("'", "&#x27;") in text
    for words in (
        "Al &amp; more",
        "ab" * 32,
        "cd" * 32,
        "a table with a name",
        "no current was given",
        "one open exposure only",
        "density of PMMA: 1.19 g/cm3",
        "beam filters: Al 2 mm",
    ):
        assert words in text
    # 0.1 over 0.025, squared: repeats until the calibration's error is as large
    assert '<td class="n">16</td>' in text


def test_what_deserves_a_look(maps: Maps) -> None:
    flags = maps.flags.copy()
    flags[:, :3] |= int(PixelFlag.FEW_COUNTS)
    odd = replace(
        make_maps(scatter=1.3),
        flags=flags,
        deviance=2.0 * maps.deviance,
        process={"bins": "5"},
    )
    look = " ".join(report_page(odd).look)
    assert "of the pixels are flagged" in look
    assert "something besides counting moves the counts" in look
    assert "PMMA scatters between exposures 1." in look


def test_maps_without_a_value_or_a_record() -> None:
    empty = make_maps(exposures=1)
    empty = replace(
        empty,
        areal_density=np.full_like(empty.areal_density, np.nan),
        areal_density_errors=np.full_like(empty.areal_density, np.nan),
        covariance=np.full_like(empty.covariance, np.nan),
        calibration_errors=np.full_like(empty.areal_density, np.nan),
        deviance=np.full_like(empty.deviance, np.nan),
        flags=np.full_like(empty.flags, int(PixelFlag.BAD_PIXEL)),
        process={},
    )
    page = report_page(empty)
    assert page.title == "PMMA and Al & more"
    assert page.said[0] == "PMMA: no pixel has a value."


@pytest.mark.parametrize("shape", [(1, 700), (90, 6)])
def test_lines_of_pixels(shape: tuple[int, int]) -> None:
    y, x = shape
    some = np.ones((1, 1, y, x), np.float32)
    page = report_page(
        Maps(
            material=("PE",),
            exposure=np.array([0], np.int32),
            areal_density=some,
            areal_density_errors=0.1 * some,
            covariance=0.01 * some,
            calibration_errors=0.0 * some,
            deviance=some[0],
            flags=np.zeros((1, y, x), np.uint16),
        )
    )
    assert page.look == []
    assert page.said[-1] == "No pixel carries a flag."
    assert "Correlation of the errors" not in page.html()


def test_profiles_are_thinned_by_medians() -> None:
    values = np.array([1.0, 2.0, 9.0, np.nan, np.nan, np.nan, 5.0])
    assert thinned(values, 1) is values
    assert np.array_equal(thinned(values, 3), [2.0, np.nan, 5.0], equal_nan=True)


def test_rows_that_are_not_there(maps: Maps) -> None:
    assert "PMMA, row 3" in report_page(maps, exposure=4, row=3).html()
    with pytest.raises(InputError, match=r"row 18 is not in the maps, .* rows 0 to 17"):
        report_page(maps, row=18)


def test_no_exposures_are_refused(maps: Maps) -> None:
    nothing = maps_blocks.maps_at(maps, np.zeros(0, np.int64))
    with pytest.raises(InputError, match="the maps hold no exposure"):
        report_page(nothing)


def test_a_file_of_none_of_the_three(tmp_path: Path, maps: Maps) -> None:
    path = tmp_path / "maps.h5"
    write_maps(maps, path)
    page = write_report(path, tmp_path / "page.html")
    assert (tmp_path / "page.html").read_text(encoding="utf-8") == page.html()
    assert [p.name for p in sorted(tmp_path.iterdir())] == ["maps.h5", "page.html"]
    h5py = pytest.importorskip("h5py")
    with h5py.File(path, "r+") as file:
        del file["entry/maps/areal_density"]
    with pytest.raises(FileFormatError, match="holds no scan, calibration or maps"):
        report_page(path)
    with pytest.raises(FileFormatError, match="so these are no maps"):
        MapsBlocks(path)


def test_entries_of_the_record() -> None:
    assert plain_entry('{"bias_correction": true, "x": [1, 2.5]}') == (
        "bias correction: yes\nx: 1, 2.5"
    )
    assert plain_entry("[]") == "none"
    assert plain_entry("plain words") == "plain words"
    assert numbers_in("[1, 2.5]") == [1.0, 2.5]
    assert numbers_in("words") == []
    assert numbers_in("{}") == []


def test_an_entry_within_an_entry_stays_on_its_line() -> None:
    text = '{"voltage_kv": 90.0, "densities_g_cm3": {"PMMA": 1.19, "Al": 2.7}}'
    assert plain_entry(text) == (
        "voltage (kV): 90\ndensities (g/cm3): PMMA 1.19, Al 2.7"
    )


def test_the_summary_names_each_flag_with_its_pixels(maps: Maps) -> None:
    said = report_page(maps).said[-1]
    assert "bad pixel (1)" in said
    assert said.endswith(").")


def test_quartiles_err_as_repeats_of_them_do() -> None:
    """Against simulation: 400 exposures of an object of two thicknesses."""
    rng = np.random.default_rng(21)
    truth = np.where(np.arange(600) < 350, 1.0, 2.0) + 0.2 * rng.random(600)
    error = np.full(600, 0.3)
    repeats = truth + error * rng.normal(size=(400, 600))
    seen = np.percentile(repeats, [25, 50, 75], axis=1).std(axis=1, ddof=1)
    expected = quartile_errors(truth[None], error[None])
    # a standard deviation of 400 is known to 4 %; quantiles move to first order only
    np.testing.assert_allclose(expected, seen, rtol=0.25)
    assert np.isnan(quartile_errors(np.full((2, 2), np.nan), np.ones((2, 2)))).all()
