"""Two calibrations compared: planted changes come back, unchanged pixels stay.

Pairs of calibrations come from two data sets of made-up pixels with known information:
posterior means and covariances are worked out by Bayes' rule, so that everything the
comparison says of its errors can be checked.
"""

from __future__ import annotations

import json
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
from scipy import stats

from spectral.calibration.comparison import FALSE_ALARM, by_reason, compare
from spectral.calibration.comparison_summary import (
    comparison_summary,
    comparison_text,
)
from spectral.calibration.residual import ResidualCorrection
from spectral.calibration.result import Calibration, Promise
from spectral.errors import CalibrationError
from spectral.reporting.comparison_page import comparison_page, write_comparison
from spectral.scans.bad_pixels import PixelReason
from spectral.scans.scan import Layer

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from numpy.typing import NDArray

LEVELS_KEV = np.array([20.0, 32.0, 45.0, 60.0])
SHAPE = (40, 50)
SIZE = 7
SPREAD = np.array([0.02, 0.6, 0.6, 0.6, 0.6, 0.3, 0.04])
NAMES = ("ln_flux", "ln_noise", "ln_dead_time", "shift_1_kev")


@pytest.fixture(scope="module")
def plain(make_calibration: Callable[..., Calibration]) -> Calibration:
    """A calibration of made-up pixels whose smooth correction does nothing."""
    made = make_calibration(SHAPE)
    n = made.steps.exposure.size
    return replace(
        made,
        residual=ResidualCorrection(
            largest=made.largest,
            powers=np.array([[0, 0], [1, 0], [0, 1]]),
            coefficient=np.zeros((5, 4)),
            covariance=np.tile(1e-10 * np.eye(5), (4, 1, 1)),
            reference_current_ma=4.0,
            decay=np.array([0.2, 0.4]),
            size=1e-3,
            drift_spread=1e-3,
            drift=np.zeros(16),
            degree=1,
        ),
        spread=np.diag(SPREAD**2),
        steps=replace(
            made.steps,
            residual=np.full((n, 4), 3e-4),
            physics_residual=np.full((n, 4), 1e-3),
            error=np.full((n, 4), 4e-4),
        ),
        unknowns=dict.fromkeys(NAMES, 0.5),
        unknown_errors=dict.fromkeys(NAMES, 0.1),
        assumptions=(),
        scan_source="wedge.h5",
        version="1",
    )


def pair(
    plain: Calibration,
    *,
    change: NDArray[np.float64] | float = 0.0,
    seed: int = 5,
) -> tuple[Calibration, Calibration]:
    """Two calibrations of the same pixels; ``change`` is added to the second's truth.

    Departures are drawn from the population; each data set measures five combinations
    of them, another five in another pixel, so that some directions are all but unknown.
    """
    rng = np.random.default_rng(seed)
    pixels = SHAPE[0] * SHAPE[1]
    true = rng.normal(0.0, 1.0, (pixels, SIZE)) * SPREAD
    made = []
    for turn, sharpness in enumerate((5.0, 3.0)):
        now = true + change * turn
        seen = sharpness * rng.normal(0.0, 1.0, (pixels, 5, SIZE)) / SPREAD
        data = (seen @ now[..., None])[..., 0] + rng.normal(0.0, 1.0, (pixels, 5))
        information = seen.transpose(0, 2, 1) @ seen
        covariance = np.linalg.inv(information + np.diag(SPREAD**-2.0))
        pull = (seen.transpose(0, 2, 1) @ data[..., None])[..., 0]
        departures = (covariance @ pull[..., None])[..., 0]
        made.append(
            replace(
                plain,
                departures=departures.reshape(*SHAPE, SIZE),
                departure_covariance=covariance.reshape(*SHAPE, SIZE, SIZE).astype(
                    np.float32
                ),
            )
        )
    return made[0], replace(made[1], created="2026-01-08T00:00:00+00:00")


@pytest.fixture(scope="module")
def old(plain: Calibration) -> Calibration:
    return pair(plain)[0]


@pytest.fixture(scope="module")
def new(plain: Calibration) -> Calibration:
    return pair(plain)[1]


def test_unchanged_pixels_are_within_their_errors(
    old: Calibration, new: Calibration
) -> None:
    found = compare(old, new)
    pixels = found.both_good.sum()
    # robust spread of 2000 values: known to 3 %; laws with wide tails, as their
    # covariances differ from pixel to pixel: some 20 % less than the mean variance says
    assert np.all(found.spread_ratio < 1.1)
    assert np.all(found.spread_ratio > 0.7)
    # each chi-square is exact: their sum is one with as many degrees as all together
    freedom = int(found.freedom.sum())
    assert freedom > 3 * pixels
    chance = stats.chi2.sf(np.nansum(found.chi_square), freedom)
    assert 1e-3 < chance < 1.0 - 1e-3
    assert found.by_chance == pytest.approx(FALSE_ALARM * pixels)
    # Poisson with mean 2
    assert found.changed.sum() <= 8
    assert np.all(np.abs(found.median_pull) < 3.5)
    assert found.average.shift_chance > 1e-3
    assert found.notes == ()


def test_planted_movement_of_the_average_pixel_is_found(
    old: Calibration, new: Calibration
) -> None:
    shift = np.array([0.3, -0.2, 0.1, 0.4])
    model = new.model.with_dead_time(1.03)
    moved = replace(
        new,
        levels_kev=LEVELS_KEV + shift,
        photons_per_mas=1.05e5,
        model=replace(model, noise_kev=1.65),
    )
    found = compare(old, moved)
    average = found.average
    # expected counts carry no noise: only the priors pull, by a part of the errors
    assert np.all(np.abs(average.shift_kev - shift) < average.shift_error_kev)
    assert np.all(np.abs(average.shift_kev - shift) < 0.05)
    assert average.flux_share == pytest.approx(0.05, abs=average.flux_error)
    assert average.noise_kev == pytest.approx(0.05, abs=average.noise_error_kev)
    assert average.dead_time_share == pytest.approx(0.03, abs=average.dead_time_error)
    assert average.shift_chance < 1e-9
    assert np.abs(average.left).max() < 1e-3
    np.testing.assert_allclose(
        np.nanmedian(found.change_kev, axis=(1, 2)), found.median_kev, atol=1e-12
    )
    back = compare(moved, old).average
    np.testing.assert_allclose(back.shift_kev, -average.shift_kev, atol=1e-6)


def test_changed_beam_is_left_over(old: Calibration, new: Calibration) -> None:
    harder = new.model.spectrum * np.exp(-0.27 * new.model.attenuation[1])
    found = compare(old, replace(new, model=replace(new.model, spectrum=harder)))
    assert np.abs(found.average.left).max() > 5e-3


def test_pixels_that_changed_are_picked_out(old: Calibration, new: Calibration) -> None:
    departures = new.departures.copy()
    departures[3, 4, 1:5] += 3.0
    departures[20:22, 30, 0] += 0.3
    found = compare(old, replace(new, departures=departures))
    assert found.changed[3, 4]
    assert found.changed[20:22, 30].all()
    assert found.changed.sum() < 12
    # robust figures do not mind three pixels
    unchanged = compare(old, new)
    np.testing.assert_allclose(found.spread_kev, unchanged.spread_kev, rtol=0.01)
    assert found.area_percent[20, 30] - unchanged.area_percent[20, 30] > 25.0


def test_pixels_that_all_drifted_apart_widen_the_spread(plain: Calibration) -> None:
    rng = np.random.default_rng(6)
    change = np.zeros((SHAPE[0] * SHAPE[1], SIZE))
    change[:, 1:5] = rng.normal(0.0, 0.5, (change.shape[0], 4))
    found = compare(*pair(plain, change=change))
    assert np.all(found.spread_ratio > 1.25)
    assert found.changed.mean() > 0.1
    assert "pixels moved apart" in comparison_text(found)


def test_bad_and_recovered_pixels_by_reason(old: Calibration, new: Calibration) -> None:
    before, after = (np.zeros(SHAPE, np.uint16) for _ in range(2))
    before[0, 0] = PixelReason.NOISY
    before[1, 1] = after[1, 1] = PixelReason.DEAD
    after[2, :2] = PixelReason.MISFIT
    found = compare(
        replace(old, pixel_reasons=before), replace(new, pixel_reasons=after)
    )
    assert by_reason(found.newly_bad) == {"MISFIT": 2}
    assert by_reason(found.recovered) == {"NOISY": 1}
    assert found.both_good.sum() == SHAPE[0] * SHAPE[1] - 4
    assert np.isnan(found.change_kev[:, 1, 1]).all()
    assert "2 newly bad (2 misfit), 1 recovered (1 noisy)" in comparison_text(found)


def test_other_settings_are_refused(old: Calibration, new: Calibration) -> None:
    other = Layer(name="Cu", formula="Cu", density_g_cm3=8.96)
    small = replace(
        new,
        departures=new.departures[:10],
        departure_covariance=new.departure_covariance[:10],
        pixel_reasons=new.pixel_reasons[:10],
    )
    cases = (
        (small, r"has 10 x 50 pixels \(rows x columns\) and not 40 x 50"),
        (
            replace(new, thresholds_kev=LEVELS_KEV),
            "has thresholds at 20, 32, 45, 60 keV and not at 19.5",
        ),
        (
            replace(new, thresholds_kev=LEVELS_KEV[:3]),
            "^the new calibration cannot be compared with the old calibration: it has 3",
        ),
        (replace(new, voltage_kv=80.0), "was taken at 80 kV and not at 90 kV"),
        (replace(new, materials=(new.materials[0], other)), "and Cu .* and not of"),
        (replace(new, filters=("Cu 0.1 mm",)), "has the filters Cu 0.1 mm and not Al"),
    )
    for made, sentence in cases:
        with pytest.raises(CalibrationError, match=sentence):
            compare(old, made)
    all_bad = replace(new, pixel_reasons=np.ones(SHAPE, np.uint16))
    with pytest.raises(CalibrationError, match=r"no pixel is good in both a\.h5 and b"):
        compare(old, all_bad, names=("a.h5", "b.h5"))


def test_calibrations_that_no_movement_joins_are_refused(
    old: Calibration, new: Calibration
) -> None:
    words = r"^b\.h5 cannot be compared with a\.h5: no small movement of the average"
    for other in (
        replace(new, photons_per_mas=1e8),
        replace(new, levels_kev=new.levels_kev + np.array([0.0, 0.0, 0.0, 9.0])),
    ):
        with pytest.raises(CalibrationError, match=words):
            compare(old, other, names=("a.h5", "b.h5"))


def test_what_limits_the_comparison_is_noted(
    old: Calibration, new: Calibration
) -> None:
    child = replace(
        new,
        findings=("Refreshed from the calibration of 2026-01-01T00:00:00+00:00 (x)",),
        version="2",
        steps=replace(new.steps, areal_density=0.5 * new.steps.areal_density),
    )
    notes = compare(old, child).notes
    assert any("is the old one refreshed" in note for note in notes)
    assert any("different versions, 1 and 2" in note for note in notes)
    assert any("thickest steps of the two wedge scans differ" in note for note in notes)


def promised(pattern: float) -> Promise:
    return Promise(
        exposure=np.arange(2),
        bias=np.zeros((2, 2)),
        single_error=np.ones((2, 2)),
        fixed_pattern=np.array([pattern, 2 * pattern]),
    )


def test_summary_and_text(old: Calibration, new: Calibration) -> None:
    found = compare(
        replace(old, promise=promised(0.1)), replace(new, promise=promised(0.2))
    )
    summary = comparison_summary(found)
    json.dumps(summary, allow_nan=False)
    assert summary["pixels_good_in_both"] == 2000
    assert summary["threshold_change_kev"] == pytest.approx(found.median_kev, abs=1e-4)
    assert summary["fixed_pattern_over_error"] == [[0.1, 0.2], [0.2, 0.4]]
    assert summary["unknowns"]["ln_flux"]["old"] == 0.5
    assert summary["residual_percent"] == pytest.approx([0.03, 0.03])
    text = comparison_text(found)
    assert "The thresholds did not clearly move on average" in text
    assert "PMMA 0.100 and 0.200, Al 0.200 and 0.400" in text
    assert "which the errors of both explain" in text
    assert "keV in the median pixel with an error of" in text


def test_a_calibration_compared_with_itself_says_so(
    old: Calibration, new: Calibration
) -> None:
    said = "note: Both are one and the same calibration"
    stored = replace(old, digest="ab" * 32), replace(old, digest="ab" * 32)
    for pair in ((old, old), stored):
        assert said in comparison_text(compare(*pair))
        assert any(said[6:] in text for text in comparison_page(*pair).look)
    assert said not in comparison_text(compare(old, new))


def test_page_says_what_the_comparison_found(
    old: Calibration, new: Calibration, tmp_path: Path
) -> None:
    reasons = np.zeros(SHAPE, np.uint16)
    reasons[2, :2] = PixelReason.MISFIT
    moved = replace(new, levels_kev=LEVELS_KEV + 0.3, pixel_reasons=reasons)
    page = write_comparison(
        old, moved, tmp_path / "page.html", names=("a/old.h5", "b/new.h5")
    )
    assert page.title == "from old.h5 to new.h5"
    text = (tmp_path / "page.html").read_text(encoding="utf-8")
    assert "://" not in text
    # thresholds, areas, newly bad pixels
    assert text.count("<img") == 3
    assert "There are no recovered pixels." in text
    figures = {f.name: f.value for f in page.figures}
    assert figures["newly bad pixels"] == 2.0
    found = compare(old, moved)
    assert found.median_kev.max() in figures.values()


def test_page_of_pixels_that_moved_apart_asks_for_a_look(
    old: Calibration, new: Calibration
) -> None:
    departures = new.departures.copy()
    rng = np.random.default_rng(9)
    departures[..., 1:5] += rng.normal(0.0, 1.0, (*SHAPE, 4))
    page = comparison_page(old, replace(new, departures=departures))
    assert any("Pixels moved apart" in text for text in page.look)
    assert any("are expected by chance" in text for text in page.look)
