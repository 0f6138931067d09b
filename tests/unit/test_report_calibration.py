"""The page about a calibration: its figures are the calibration's, in words."""

from __future__ import annotations

from dataclasses import replace
from html import unescape
from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.calibration.calibration_file import write_calibration
from spectral.calibration.result import Promise
from spectral.errors import InputError
from spectral.reporting.calibration_figures import (
    bin_responses,
    of_pixels,
    residual_size,
    response_curves,
    thresholds,
    unknowns,
)
from spectral.reporting.report import report_page
from spectral.reporting.wording import SIGMA
from spectral.scans.bad_pixels import PixelReason

if TYPE_CHECKING:
    from pathlib import Path

    from spectral.calibration.result import Calibration
    from spectral.forward.counting_model import CountingModel
    from spectral.reporting.page import Page
    from tests.conftest import MakeCalibration

OFFSET_KEV = np.array([-1.5, 0.25, 1.0, 0.5])
UNKNOWNS = {
    "ln_flux": (np.log(1e5), 0.01),
    "ln_voltage": (np.log(1.03), 0.002),
    "ln_noise": (np.log(1.8), 0.05),
    "ln_dead_time": (np.log(150.0), 0.03),
    "trapping": (0.01, 0.005),
    "shift_1_kev": (-1.5, 0.1),
    "shift_2_kev": (0.25, 0.2),
    "shift_3_kev": (1.0, 0.3),
    "shift_4_kev": (0.5, 0.3),
}
DEAD_TIME_NS = 150.0 + 30.0 * (2.6783 - 0.2320)
"""Held for 150 ns, and above half its peak as x exp(1 - x) is, with x in 30 ns; the
roots by hand."""


def one_pulse_each(model: CountingModel) -> CountingModel:
    """The model with one pulse of its own energy for 70 % of the photons."""
    place = (model.energy_kev / model.step_kev).astype(int)
    heights = np.zeros_like(model.heights)
    heights[np.arange(place.size), place] = 0.7
    return replace(model, heights=heights, noise_kev=1.8)


@pytest.fixture(scope="module")
def calibration(make_calibration: MakeCalibration) -> Calibration:
    """The shared calibration with sick pixels, and means that its model misses."""
    rng = np.random.default_rng(5)
    shape = (14, 20)
    made = make_calibration(shape)
    reasons = np.zeros(shape, np.uint16)
    reasons[3, 4] = PixelReason.DEAD
    reasons[5, 6] = PixelReason.NOISY | PixelReason.UNSTABLE
    good = reasons == 0
    size = made.departures.shape[-1]
    missed = made.steps.residual.shape
    return replace(
        made,
        materials=(made.materials[0], replace(made.materials[1], name="Al <6061>")),
        thresholds_kev=made.levels_kev - OFFSET_KEV,
        model=one_pulse_each(made.model),
        departures=np.where(good[..., None], made.departures, 0.0),
        departure_covariance=np.broadcast_to(
            (np.eye(size) * 0.09).astype(np.float32), (*shape, size, size)
        ),
        pixel_reasons=reasons,
        deviance=np.where(good, made.deviance, np.nan).astype(np.float32),
        steps=replace(
            made.steps,
            residual=rng.normal(0.0, 4e-4, missed),
            physics_residual=rng.normal(0.0, 3e-3, missed),
            error=np.full(missed, 4e-4),
        ),
        unknowns={name: float(v) for name, (v, _) in UNKNOWNS.items()},
        unknown_errors={name: e for name, (_, e) in UNKNOWNS.items()},
        assumptions=("no pixel mask is given",),
        findings=("Exposure 7 looks mislabelled.",),
        scan_digest="ab" * 32,
        version="9.9",
        cross_sections="a table with a name",
        digest="cd" * 32,
    )


@pytest.fixture(scope="module")
def page(calibration: Calibration) -> Page:
    return report_page(calibration)


def test_thresholds_are_those_of_the_good_pixels(calibration: Calibration) -> None:
    found = thresholds(calibration)
    shift = calibration.departures[calibration.good][:, 1:5]
    assert found.mean == pytest.approx(OFFSET_KEV + shift.mean(axis=0))
    assert found.spread == pytest.approx(shift.std(axis=0, ddof=1))
    assert found.pixel_error == pytest.approx(0.3)
    assert found.mean_error.tolist() == [0.1, 0.2, 0.3, 0.3]
    assert np.isnan(found.offset[:, ~calibration.good]).all()
    assert np.isfinite(found.departure[:, calibration.good]).all()


def test_maps_of_the_pixels(calibration: Calibration) -> None:
    maps = of_pixels(calibration)
    first = calibration.departures[0, 0]
    assert maps["area"][0, 0] == pytest.approx(100.0 * (np.exp(first[0]) - 1.0))
    assert maps["noise"][0, 0] == pytest.approx(np.sqrt(1.8**2 + first[-2]))
    assert maps["dead_time"][0, 0] == pytest.approx(
        DEAD_TIME_NS * np.exp(first[-1]), rel=1e-4
    )
    assert all(np.isnan(m[3, 4]) for m in maps.values())


def test_unknowns_in_their_units(calibration: Calibration) -> None:
    found = {u.words: u for u in unknowns(calibration)}
    voltage = found["tube voltage over its nominal value"]
    assert voltage.value == pytest.approx(1.03)
    assert voltage.error == pytest.approx(1.03 * 0.002)
    assert voltage.pull == pytest.approx(np.log(1.03) / 0.01)
    assert voltage.expected == "1.000 ± 0.010"
    third = found["threshold 3 minus its nominal 44.0 keV"]
    assert (third.value, third.error, third.unit) == (1.0, 0.3, "keV")
    flux = found["photons of the open beam upon a pixel per mA s"]
    assert flux.vague
    assert flux.expected == "anything"
    assert found["time that a pulse is held at its peak"].expected == (
        "20.0, within a factor 7.4"
    )


def test_an_unknown_that_no_one_knows_keeps_its_name(calibration: Calibration) -> None:
    other = replace(calibration, unknowns={"odd_thing": 1.0}, unknown_errors={})
    (found,) = unknowns(other)
    assert found.words == "odd thing"
    assert found.expected == "anything"
    assert np.isnan(found.pull)


def test_response_of_one_pulse_a_photon(calibration: Calibration) -> None:
    """70 % of the photons give a pulse of their energy: half of them at the energy."""
    energy, level, above = response_curves(calibration, np.array([40.4, 41.9, 60.6]))
    assert energy.tolist() == [40.0, 42.0, 60.0]
    for e, curve in zip(energy, above, strict=True):
        assert curve[level == 5.0] == pytest.approx(0.7, abs=1e-6)
        assert curve[level == e] == pytest.approx(0.35, abs=1e-6)
        # one standard deviation of the noise below: normal distribution, 84.13 %
        assert np.interp(e - 1.8, level, curve) == pytest.approx(0.7 * 0.8413, abs=5e-3)
        assert curve[level == e + 15.0] == pytest.approx(0.0, abs=1e-6)
    bins = bin_responses(calibration)
    assert bins.sum(axis=0)[-5:] == pytest.approx(0.7, abs=1e-6)


def test_residuals_before_and_after(calibration: Calibration) -> None:
    after = residual_size(calibration, corrected=True)
    before = residual_size(calibration, corrected=False)
    assert after.share == pytest.approx(np.sqrt(np.mean(calibration.steps.residual**2)))
    assert after.sigmas == pytest.approx(after.share / 4e-4)
    assert before.share > after.share


def test_the_page_says_the_figures(page: Page) -> None:
    figures = {f.name: f for f in page.figures}
    assert figures["pixels that can be used"].value == pytest.approx(278 / 280)
    assert figures["pixels that can be used"].text.startswith("99.3")
    assert figures["dead time of the average pixel"].text == "223 ns"
    assert figures["electronic noise"].text == "1.800 ± 0.090 keV"
    said = " ".join(page.said)
    assert "(278 of 280)" in said
    assert "PMMA up to 9.00 g/cm² and" not in said
    assert "It holds for PMMA up to 9.00 g/cm², Al <6061> up to 3.00 g/cm²" in said
    assert "not put to the test of steps left out" in said
    look = " ".join(page.look)
    assert "Exposure 7 looks mislabelled." in look
    assert "tube voltage over its nominal value came out at 1.0300 ± 0.0021" in look


def test_the_text_of_the_page(page: Page) -> None:
    text = page.html()
    assert "Al &lt;6061&gt;" in text
    assert "<6061>" not in text
    plain = unescape(text)
    for words in (
        "it counts in the dark",
        "no pixel mask is given",
        "a table with a name",
        "ab" * 32,
        "cd" * 32,
        "wedgewright 9.9",
        "Al 2 mm",
        "not a medical device",
    ):
        assert words in plain


def test_a_promise_is_reported(calibration: Calibration) -> None:
    promise = Promise(
        exposure=np.array([4, 5, 6, 8]),
        bias=np.array([[0.01, -0.02], [0.03, 0.0], [-0.01, 0.02], [0.01, 0.0]]),
        single_error=np.full((4, 2), 0.1),
        fixed_pattern=np.array([0.15, 0.17]),
    )
    page = report_page(replace(calibration, promise=promise))
    figures = {f.name: f for f in page.figures}
    # root of (1 + 9 + 1 + 1) / 4 hundredths
    bias = figures["PMMA: bias of unseen steps"]
    assert bias.value == pytest.approx(0.01 * np.sqrt(3.0))
    assert bias.text == "0.017 g/cm²"
    assert "fixed pattern 0.15" in bias.remark
    assert any("Steps that it had not seen" in text for text in page.said)
    assert "+0.0300 (exposure 5)" in page.html()


def test_a_residual_beyond_the_counting_error_is_named(
    calibration: Calibration,
) -> None:
    residual = calibration.steps.residual.copy()
    residual[4, 1] = 10.0 * 4e-4
    odd = replace(calibration, steps=replace(calibration.steps, residual=residual))
    look = " ".join(report_page(odd).look)
    assert "Not met within the counting error: exposure 4 (PMMA 3.00" in look
    assert f"10.0 {SIGMA}" in look


def test_from_a_file(calibration: Calibration, tmp_path: Path) -> None:
    path = tmp_path / "calibration.h5"
    write_calibration(calibration, path)
    page = report_page(path)
    assert page.kind.startswith("Calibration, 14 by 20 pixels, 4 thresholds, 90 kV")
    assert dict(page.record)["calibration"] == str(path)
    with pytest.raises(InputError, match="exposure and row choose among maps"):
        report_page(path, row=1)


def test_one_material_and_one_good_pixel(calibration: Calibration) -> None:
    """The smallest calibration still makes a page."""
    table = calibration.steps
    reasons = np.full(calibration.shape, int(PixelReason.DEAD), np.uint16)
    reasons[2, 2] = 0
    small = replace(
        calibration,
        materials=calibration.materials[:1],
        model=replace(calibration.model, attenuation=calibration.model.attenuation[:1]),
        steps=replace(table, areal_density=table.areal_density[:, :1]),
        pixel_reasons=reasons,
    )
    assert report_page(small).figures[0].value == pytest.approx(1 / 280)
