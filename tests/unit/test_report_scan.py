"""The page about a scan: its verdict, its exposures and what moved."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.errors import FileFormatError, InputError
from spectral.reporting.report import report, report_page
from spectral.reporting.scan_figures import (
    attenuations,
    loss_sentence,
    middle_half_width,
    scan_figures,
)
from spectral.scans.counting_loss import CountingLoss
from spectral.scans.scan import CountsInMemory
from spectral.scans.scan_check import check_scan
from spectral.scans.stored_counts import NOT_A_COUNT

if TYPE_CHECKING:
    from pathlib import Path

    from spectral.scans.scan import Scan
    from tests.conftest import MakeScan


@pytest.fixture(scope="module")
def scan(make_scan: MakeScan) -> Scan:
    return make_scan(pixels=(16, 20), loss=0.05)


def test_figures_are_those_of_the_sound_pixels(scan: Scan) -> None:
    sound = np.zeros((16, 20), bool)
    sound[2:5, 3:9] = True
    counts = scan.counts.read(range(scan.shape[0])).astype(float)
    found = scan_figures(scan, sound)
    assert found.median == pytest.approx(np.median(counts[:, :, sound], axis=2))
    assert found.mean == pytest.approx(counts[:, :, sound].mean(axis=2))
    assert scan.current_ma is not None
    lit = scan.exposures("wedge")
    charge = (scan.current_ma * scan.count_time_s)[lit]
    assert found.per_mas[lit] == pytest.approx(found.mean[lit] / charge[:, None])
    bright = [i for i in scan.exposures("open") if scan.current_ma[i] == 3.0]
    assert found.open_rate == pytest.approx(counts[bright, 0].mean(axis=0) / 0.5)
    assert found.dark_rate == pytest.approx(np.zeros((16, 20)))


def test_attenuation_is_the_logarithm_of_open_over_step(scan: Scan) -> None:
    found = scan_figures(scan, np.ones((16, 20), bool))
    wedge, attenuation = attenuations(scan, found)
    assert wedge.tolist() == scan.exposures("wedge").tolist()
    assert scan.current_ma is not None
    bright = [i for i in scan.exposures("open") if scan.current_ma[i] == 3.0]
    expected = np.log(found.mean[bright].mean(axis=0) / found.mean[wedge[0]])
    assert attenuation[0] == pytest.approx(expected)
    without = replace(scan, role=("dark",) * 2 + ("object",) * (scan.shape[0] - 2))
    assert attenuations(without, found)[0].size == 0


def test_what_cannot_be_a_count_is_left_out(scan: Scan) -> None:
    counts = scan.counts.read(range(scan.shape[0])).copy()
    counts[4, :, :8] = NOT_A_COUNT
    counts[5] = NOT_A_COUNT
    spoilt = replace(scan, counts=CountsInMemory(counts))
    found = scan_figures(spoilt, np.zeros((16, 20), bool))
    assert found.mean[4] == pytest.approx(counts[4, :, 8:].mean(axis=(1, 2)))
    assert np.isnan(found.mean[5]).all()


def test_the_page_says_the_verdict_and_the_figures(scan: Scan) -> None:
    check = check_scan(scan)
    page = report_page(scan, check=check)
    assert page.title == "a made-up detector"
    assert page.said[0].startswith("The scan is fit for use")
    assert "2 dark, 4 open and 11 wedge" in page.said[1]
    figures = {f.name: f for f in page.figures}
    lowest = check.thresholds[0]
    assert figures["open counts of a pixel, lowest threshold"].value == pytest.approx(
        lowest.open_counts
    )
    assert figures["last open against first"].value == pytest.approx(lowest.drift)
    assert check.loss is not None
    assert figures["dead time"].value == pytest.approx(check.loss.median_ns)
    assert figures["sound pixels"].value == pytest.approx(
        float(np.mean(check.reasons == 0))
    )
    titles = [s.title for s in page.sections]
    assert titles == ["Exposures", "Wedge steps", "Thresholds", "Counting", "Pixels"]
    text = page.html()
    table = text.split("Counts of the median sound pixel")[2].split("</table>")[0]
    assert table.count("<tr>") == 1 + scan.shape[0]
    middle = scan_figures(scan, check.reasons == 0).median
    for value in middle[6]:
        assert f">{value:.1f}".removesuffix(".0") in table
    assert ">0.5</td>" in table
    assert "beam filters: Al 2 mm" in text


def test_a_problem_of_an_exposure_is_shown(scan: Scan) -> None:
    counts = scan.counts.read(range(scan.shape[0])).copy()
    counts[8] = counts[7]
    page = report_page(replace(scan, counts=CountsInMemory(counts)))
    text = page.html()
    assert "Exposures that do not fit what the scan says of them" in text
    assert "8 (see above)" in text
    assert any("should be looked at" in sentence for sentence in page.look)


def test_a_scan_of_an_object_alone(make_scan: MakeScan) -> None:
    """No open, no dark, no current, one threshold, no material: still a page."""
    whole = make_scan(pixels=(8, 9), wedge=False, opens=0, darks=0, objects=3)
    counts = whole.counts.read(range(3))[:, :1]
    scan = replace(
        whole,
        counts=CountsInMemory(counts),
        thresholds_kev=whole.thresholds_kev[:1],
        thickness_mm=np.zeros((3, 0)),
        materials=(),
        current_ma=None,
        filters=(),
        sensor_material=None,
        title="",
        source="folder/object.h5",
    )
    page = report_page(scan)
    assert page.title == "object.h5"
    assert page.said[0] == "The scan is fit for use, with the exceptions below."
    assert any("There is no open exposure: the tube" in text for text in page.look)
    assert "no named material" in page.said[1]
    assert "beam filters: none named" in page.assumed
    assert "sensor: not named" in page.assumed


def test_options_of_maps_do_not_go_with_a_scan(scan: Scan) -> None:
    with pytest.raises(InputError, match="a scan or calibration has no such"):
        report(scan, exposure=3)


def test_files_that_are_none_of_the_three(tmp_path: Path) -> None:
    with pytest.raises(FileFormatError, match="there is no such file"):
        report(tmp_path / "nothing.h5")
    words = tmp_path / "words.h5"
    words.write_text("words")
    with pytest.raises(FileFormatError, match="this is not an HDF5 file"):
        report(words)


def test_a_dead_time_within_its_error_is_no_loss() -> None:
    sure = CountingLoss(
        dead_time_ns=np.array([[100.0]]), median_ns=100.0, standard_error_ns=20.0,
        highest_rate_per_s=50000.0, loss=0.005,
    )  # fmt: skip
    assert loss_sentence(sure) == (
        "dead time 100 ± 20 ns above the lowest threshold: 0.5\u202f% of the pulses "
        "are lost at 50000 counts per second and pixel"
    )
    for unsure in (
        replace(sure, standard_error_ns=60.0),
        replace(sure, median_ns=-8.0, loss=-0.001),
    ):
        assert "as they would without dead time" in loss_sentence(unsure)
        assert "lost" not in loss_sentence(unsure)


def test_the_spread_of_pixels_is_that_of_most_of_them() -> None:
    values = np.random.default_rng(3).normal(5.0, 2.0, 20000)
    values[:100] = 1e6
    values[100:110] = np.nan
    assert middle_half_width(values) == pytest.approx(2.0, rel=0.05)
    assert np.isnan(middle_half_width(np.full(3, np.nan)))
