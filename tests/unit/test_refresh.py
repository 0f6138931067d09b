"""A calibration brought up to date: planted drifts come back with true errors.

Scans are Poisson counts of made-up pixels whose true departures are drawn about the
calibrated ones with the calibration's own covariance, as a posterior says they lie.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest
from scipy import optimize, stats

from spectral.calibration.calibration_file import read_calibration, write_calibration
from spectral.calibration.common_drift import chance_of_shift, common_drift
from spectral.calibration.drift_spread import USUAL_SHARE, drift_variance, updated
from spectral.calibration.pooled_counts import pooled
from spectral.calibration.promise import with_promise
from spectral.calibration.refresh import refresh, updated_by_opens
from spectral.calibration.refresh_summary import refresh_summary, refresh_text
from spectral.calibration.residual import ResidualCorrection
from spectral.calibration.short_scan import short_scan_data
from spectral.errors import ScanError
from spectral.scans.bad_pixels import PixelReason
from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration

LEVELS_KEV = np.array([20.0, 32.0, 45.0, 60.0])
SIDE = 24
SIZE = 7
SPREAD = np.array([0.02, 0.6, 0.6, 0.6, 0.6, 0.3, 0.04])
KNOWN = np.array([0.004, 0.1, 0.1, 0.1, 0.1, 0.15, 0.02])
CURRENT_MA = 4.0
STEPS = np.array([(0.0, 0.0), (3.0, 0.0), (6.0, 1.0), (0.0, 0.0)])


def no_correction(largest: NDArray[np.float64]) -> ResidualCorrection:
    return ResidualCorrection(
        largest=largest,
        powers=np.array([[0, 0], [1, 0], [0, 1]]),
        coefficient=np.zeros((5, 4)),
        covariance=np.tile(1e-10 * np.eye(5), (4, 1, 1)),
        reference_current_ma=CURRENT_MA,
        decay=np.array([0.2, 0.4]),
        size=1e-3,
        drift_spread=1e-3,
        drift=np.zeros(16),
        degree=1,
    )


@pytest.fixture(scope="module")
def old(make_calibration: Callable[..., Calibration]) -> Calibration:
    """A calibration of made-up pixels, each known to `KNOWN`."""
    rng = np.random.default_rng(1)
    plain = make_calibration((SIDE, SIDE))
    shape = replace(plain.model.shape, dead_time_ns=20.0, tail_ns=5.0)
    learned = np.sqrt(SPREAD**2 - KNOWN**2)
    return replace(
        plain,
        model=replace(plain.model, shape=shape),
        residual=no_correction(plain.largest),
        departures=rng.normal(0.0, 1.0, (SIDE, SIDE, SIZE)) * learned,
        departure_covariance=np.tile(
            np.diag(KNOWN**2).astype(np.float32), (SIDE, SIDE, 1, 1)
        ),
        spread=np.diag(SPREAD**2),
        unknowns={
            "ln_flux": 11.5, "ln_noise": float(np.log(1.6)), "ln_dead_time": 3.0,
            "ln_tail": 1.6, "trapping": 0.01,
            **{f"shift_{k + 1}_kev": 0.5 for k in range(4)},
        },
        unknown_errors={"ln_flux": 0.01, "shift_1_kev": 0.1},
        findings=("a finding of the wedge scan",),
        digest="ab" * 32,
    )  # fmt: skip


def truth(
    old: Calibration,
    *,
    shift_kev: NDArray[np.float64] | float = 0.0,
    pixel_shift_kev: float = 0.0,
    seed: int = 2,
) -> Calibration:
    """The pixels as they truly are: about the calibrated ones, and drifted."""
    rng = np.random.default_rng(seed)
    true = old.departures + rng.normal(0.0, 1.0, old.departures.shape) * KNOWN
    true[..., 1:5] += rng.normal(0.0, 1.0, (SIDE, SIDE, 4)) * pixel_shift_kev
    # the calibration's average pixel has the mean response: what is drawn has none
    true += (old.departures - true).mean(axis=(0, 1))
    return replace(old, departures=true, levels_kev=LEVELS_KEV + shift_kev)


def short_scan(
    true: Calibration,
    *,
    areal: NDArray[np.float64] = STEPS,
    output: float = 1.0,
    time_s: float = 0.5,
    seed: int = 3,
) -> Scan:
    """Poisson counts of true pixels behind known steps."""
    n = areal.shape[0]
    rate = true.expected_bins(
        areal, np.full(n, CURRENT_MA), np.full(n, output), np.arange(SIDE**2)
    )
    bins = np.random.default_rng(seed).poisson(rate * time_s)
    above = np.cumsum(bins[..., ::-1], axis=-1)[..., ::-1].transpose(1, 2, 0)
    return Scan(
        counts=CountsInMemory(above.reshape(n, 4, SIDE, SIDE).astype(np.uint32)),
        thresholds_kev=LEVELS_KEV - 0.5,
        role=tuple("wedge" if a.any() else "open" for a in areal),
        thickness_mm=areal / np.array([0.119, 0.27]),
        materials=true.materials,
        count_time_s=np.full(n, time_s),
        current_ma=np.full(n, CURRENT_MA),
        voltage_kv=90.0,
        filters=(Filter(material="Al", thickness_mm=2.0),),
        pixel_mask=np.zeros((SIDE, SIDE), np.uint32),
        source="short.h5",
        digest="cd" * 32,
    )


ALL = np.ones((SIDE, SIDE), bool)


def test_nothing_moved_and_nothing_is_said_to_have_moved(old: Calibration) -> None:
    done = refresh(old, short_scan(truth(old), output=1.03))
    pull = done.common.shift_kev / done.common.shift_error_kev
    assert np.abs(pull).max() < 3.5
    assert done.common.shift_chance > 1e-3
    # the variance is 0 within its error, which is 2 x spread x error of the spread
    assert np.all(done.pixels.spread < 2.0 * 3.5 * done.pixels.spread_error + 1e-9)
    assert done.common.chance > 1e-3
    np.testing.assert_allclose(done.common.output, 1.03, atol=4e-3)
    assert not done.full_scan_needed
    assert done.reasons == done.notes == ()
    assert not done.new_reasons.any()


@pytest.mark.parametrize(
    "shift", [np.full(4, 0.3), np.array([0.2, -0.1, 0.0, 0.35])], ids=["all", "each"]
)
def test_planted_shift_is_found_within_its_error(
    old: Calibration, shift: NDArray[np.float64]
) -> None:
    done = refresh(old, short_scan(truth(old, shift_kev=shift), output=0.97))
    common = done.common
    pull = (common.shift_kev - shift) / common.shift_error_kev
    assert np.abs(pull).max() < 3.5
    assert common.shift_error_kev.max() < 0.15
    assert common.shift_chance < 1e-9
    assert np.abs(common.before).max() > 3.0 * np.abs(common.residual).max()
    assert not done.full_scan_needed
    np.testing.assert_allclose(
        done.calibration.levels_kev, LEVELS_KEV + common.shift_kev
    )


@pytest.mark.slow
def test_errors_of_the_common_shift_are_true(old: Calibration) -> None:
    # the covariance is put to the test by a chi-square of 4 a scan, 25 scans
    total = 0.0
    for seed in range(25):
        data = short_scan_data(
            old, short_scan(truth(old, seed=seed), seed=100 + seed), ALL
        )
        found = common_drift(old, data)
        inverse = np.linalg.inv(found.shift_covariance)
        total += float(found.shift_kev @ inverse @ found.shift_kev)
    # priors that are wider than the truth (noise, dead time) make it smaller
    assert stats.chi2.cdf(total, 100) < 0.999
    assert total > 20.0


def test_pixels_that_drifted_are_followed(old: Calibration) -> None:
    true = truth(old, pixel_shift_kev=0.2)
    done = refresh(old, short_scan(true, time_s=2.0))
    spread, error = done.pixels.spread[1], done.pixels.spread_error[1]
    assert abs(spread - 0.2) < 4.0 * error
    assert error < 0.02
    wanted = true.departures.reshape(-1, SIZE)[:, 1:5]
    before = old.departures.reshape(-1, SIZE)[:, 1:5] - wanted
    after = done.pixels.values[:, 1:5] - wanted
    # two threshold errors of 0.1 and 0.2 keV, told from 2 s of counts
    assert after.std() < 0.75 * before.std()
    stated = np.sqrt(np.diagonal(done.pixels.covariance, axis1=1, axis2=2))[:, 1:5]
    # 4 x 576 numbers, not independent within a pixel: 3 % at most
    assert (after / stated).std() == pytest.approx(1.0, abs=0.1)


def test_far_drifts_ask_for_a_full_scan(old: Calibration) -> None:
    far = refresh(old, short_scan(truth(old, shift_kev=np.array([0.0, 0.0, 0.0, 1.4]))))
    assert far.full_scan_needed
    assert any("Threshold 4 moved by +1.4" in r for r in far.reasons)
    assert any("Threshold 4" in finding for finding in far.calibration.findings)
    apart = refresh(old, short_scan(truth(old, pixel_shift_kev=0.5), time_s=2.0))
    assert any("thresholds drifted apart by 0." in r for r in apart.reasons)
    assert "A full wedge scan is needed:" in refresh_text(apart)


def test_changed_beam_asks_for_a_full_scan(old: Calibration) -> None:
    # 1 mm of Al more: more than any movement of thresholds can stand for
    model = old.model
    harder = model.spectrum * np.exp(-0.27 * model.attenuation[1])
    true = replace(truth(old), model=replace(model, spectrum=harder))
    done = refresh(old, short_scan(true))
    assert any("does not meet the short scan's mean counts" in r for r in done.reasons)


def test_output_current_and_thickness_beyond_the_wedge_scans(old: Calibration) -> None:
    brighter = refresh(old, short_scan(truth(old), output=1.3))
    assert any("The tube's output changed by +30 %" in r for r in brighter.reasons)
    thick = np.array([(0.0, 0.0), (12.0, 0.0), (3.0, 1.0)])
    done = refresh(old, short_scan(truth(old), areal=thick))
    assert any("A step holds more PMMA than any step" in r for r in done.reasons)
    scan = short_scan(truth(old))
    stronger = replace(scan, current_ma=np.full(4, 5.0))
    found = refresh(old, stronger)
    assert any(
        "was taken at up to 5 mA, the wedge scan at 4 mA" in r for r in found.reasons
    )


def test_pixels_gone_bad_are_named(old: Calibration) -> None:
    scan = short_scan(truth(old))
    counts = scan.counts.read(range(4)).copy()
    counts[:, :, 2, 3] = 0
    few = refresh(old, scan.with_counts(counts))
    assert few.new_reasons[2, 3] & PixelReason.DEAD
    assert few.calibration.pixel_reasons[2, 3] & PixelReason.DEAD
    assert np.isnan(few.calibration.deviance[2, 3])
    assert not few.full_scan_needed
    assert "1 dead" in refresh_text(few)
    counts[:, :, 5, 3:20:2] = 0
    many = refresh(old, scan.with_counts(counts))
    assert any("pixels that were sound are not any more" in r for r in many.reasons)


def test_pixels_that_no_response_meets_are_misfits(old: Calibration) -> None:
    scan = short_scan(truth(old))
    counts = scan.counts.read(range(4)).copy().astype(float)
    # one step seen through something that no other pixel has before it
    counts[2, :, 7, 7] *= 0.9
    done = refresh(old, scan.with_counts(counts.astype(np.uint32)))
    assert done.new_reasons[7, 7] & PixelReason.MISFIT


def test_bad_pixels_stay_bad(old: Calibration) -> None:
    reasons = np.zeros((SIDE, SIDE), np.uint16)
    reasons[0, 0] = PixelReason.NOISY
    done = refresh(replace(old, pixel_reasons=reasons), short_scan(truth(old)))
    assert done.calibration.pixel_reasons[0, 0] == PixelReason.NOISY
    assert done.new_reasons[0, 0] == 0
    assert 0 not in done.pixel


def test_opens_alone_do_with_a_note(old: Calibration) -> None:
    done = refresh(old, short_scan(truth(old), areal=np.zeros((4, 2))))
    assert any("The scan holds no wedge step" in note for note in done.notes)
    assert done.common.shift_error_kev.max() > 0.1


def test_refreshed_calibration_says_where_it_came_from(
    old: Calibration, tmp_path: Path
) -> None:
    done = refresh(old, short_scan(truth(old, shift_kev=0.2), output=1.02))
    write_calibration(done.calibration, tmp_path / "new.h5")
    again = read_calibration(tmp_path / "new.h5")
    assert again.findings[0] == "a finding of the wedge scan"
    assert f"SHA-256 {'ab' * 32}" in again.findings[1]
    assert f"short.h5 (SHA-256 {'cd' * 32})" in again.findings[1]
    np.testing.assert_array_equal(again.departures, done.calibration.departures)
    # unknowns follow what they stand for
    shift = done.common.shift_kev[0]
    assert again.unknowns["shift_1_kev"] == pytest.approx(0.5 + shift)
    assert again.unknowns["ln_noise"] == pytest.approx(np.log(again.model.noise_kev))
    assert again.unknown_errors["shift_1_kev"] > 0.1
    assert again.unknowns["trapping"] == 0.01
    assert again.photons_per_mas == pytest.approx(1.02e5, rel=5e-3)


def test_promise_follows_the_pixels(old: Calibration) -> None:
    before = with_promise(old)
    done = refresh(before, short_scan(truth(old), time_s=2.0))
    assert before.promise is not None
    assert done.calibration.promise is not None
    # pixels are better known than before: the fixed pattern shrinks
    after = done.calibration.promise.fixed_pattern
    assert np.all(after < 0.8 * before.promise.fixed_pattern)


def test_summary_and_text(old: Calibration) -> None:
    done = refresh(old, short_scan(truth(old, shift_kev=0.3)))
    found: dict[str, Any] = refresh_summary(done)
    assert found["full_scan_needed"] is False
    assert found["threshold_shift_kev"] == pytest.approx(
        done.common.shift_kev, abs=1e-4
    )
    assert found["pixel_drift"]["shift_kev"] == pytest.approx(
        done.pixels.spread[1], abs=1e-5
    )
    text = refresh_text(done)
    assert "No full wedge scan is needed." in text
    assert f"{done.common.shift_kev[3]:+.3f}" in text


def test_opens_of_an_object_scan_make_pixels_better_known(old: Calibration) -> None:
    true = truth(old, pixel_shift_kev=0.15)
    scan = short_scan(true, areal=np.zeros((6, 2)), time_s=1.0)
    better = updated_by_opens(old, scan)
    np.testing.assert_array_equal(better.levels_kev, old.levels_kev)
    wanted = true.departures.reshape(-1, SIZE)
    nothing = np.zeros((1, 2)), np.array([CURRENT_MA]), np.ones(1)
    every = np.arange(SIDE**2)
    exact = true.expected_bins(*nothing, every)
    miss = [
        np.std(c.expected_bins(*nothing, every) / exact - 1.0) for c in (old, better)
    ]
    assert miss[1] < 0.6 * miss[0]
    before = np.std((old.departures.reshape(-1, SIZE) - wanted)[:, 1:5])
    after = np.std((better.departures.reshape(-1, SIZE) - wanted)[:, 1:5])
    assert after < before
    objects = replace(scan, role=("object",) * 6)
    assert updated_by_opens(old, objects) is old
    unnamed = replace(scan, materials=(), thickness_mm=np.zeros((6, 0)))
    same = updated_by_opens(old, unnamed)
    np.testing.assert_array_equal(same.departures, better.departures)


def test_scans_of_another_setting_are_refused(old: Calibration) -> None:
    scan = short_scan(truth(old))
    other = Layer(name="Cu", formula="Cu", density_g_cm3=8.96)
    cases: list[tuple[Scan, str]] = [
        (replace(scan, voltage_kv=80.0), "was taken at 80 kV and not at 90 kV"),
        (
            replace(scan, thresholds_kev=scan.thresholds_kev + 1.0),
            "has thresholds at 20.5, 32.5, 45.5, 60.5 keV and not at 19.5",
        ),
        (
            replace(scan, filters=(Filter(material="Al", thickness_mm=3.0),)),
            "has the filters Al 3 mm and not Al 2 mm",
        ),
        (
            replace(scan, materials=(scan.materials[0], other)),
            r"is of PMMA .* and Cu .* and not of PMMA .* and Al",
        ),
        (replace(scan, role=("wedge",) * 4), "no open exposure; add at least one"),
        (
            replace(scan, pixel_mask=np.ones((SIDE, SIDE), np.uint32)),
            "no pixel is sound in both scan and calibration",
        ),
        (
            replace(scan, thickness_mm=np.where(STEPS > 5.0, np.nan, STEPS)),
            "exposure 2 is a wedge step of no known thickness",
        ),
    ]
    for made, sentence in cases:
        with pytest.raises(ScanError, match=sentence):
            refresh(old, made)


def test_scans_of_another_size_are_refused(old: Calibration) -> None:
    scan = short_scan(truth(old))
    counts = scan.counts.read(range(4))
    small = replace(
        scan,
        counts=CountsInMemory(counts[:, :, :10]),
        pixel_mask=np.zeros((10, SIDE), np.uint32),
    )
    with pytest.raises(
        ScanError, match=r"has 10 x 24 pixels \(rows x columns\) and not 24 x 24"
    ):
        refresh(old, small)
    fewer = replace(
        scan,
        counts=CountsInMemory(counts[:, :3]),
        thresholds_kev=scan.thresholds_kev[:3],
    )
    with pytest.raises(ScanError, match="has 3 thresholds and not 4"):
        refresh(old, fewer)


def test_counts_that_no_small_movement_meets_are_refused(old: Calibration) -> None:
    scan = short_scan(truth(old))
    counts = scan.counts.read(range(4)).copy()
    empty = counts.copy()
    empty[1, 3] = 0
    data = short_scan_data(old, scan.with_counts(empty), ALL)
    with pytest.raises(ScanError, match="exposure 1 holds no counts in bin 4"):
        common_drift(old, data)
    far = short_scan(truth(old, shift_kev=np.array([0.0, 0.0, 0.0, 9.0])))
    with pytest.raises(ScanError, match="thresholds moved by more than 3 keV"):
        refresh(old, far)


def test_current_that_the_scan_does_not_give_is_the_calibrations(
    old: Calibration,
) -> None:
    scan = replace(short_scan(truth(old)), current_ma=None)
    data = short_scan_data(old, scan, ALL)
    np.testing.assert_array_equal(data.current_ma, CURRENT_MA)


def test_change_of_pooled_counts_is_their_derivative(old: Calibration) -> None:
    data = short_scan_data(old, short_scan(truth(old)), ALL)
    n = data.exposure.size
    _, change = pooled(old, data, np.ones(n))
    up, _ = pooled(old, data, np.full(n, np.exp(1e-3)))
    down, _ = pooled(old, data, np.full(n, np.exp(-1e-3)))
    np.testing.assert_allclose(change[..., 0], (up - down) / 2e-3, rtol=2e-3)
    for k in range(4):
        step = np.where(np.arange(4) == k, 0.01, 0.0)
        up, _ = pooled(replace(old, levels_kev=LEVELS_KEV + step), data, np.ones(n))
        down, _ = pooled(replace(old, levels_kev=LEVELS_KEV - step), data, np.ones(n))
        slope = (up - down) / 0.02
        np.testing.assert_allclose(
            change[..., 1 + k], slope, rtol=2e-3, atol=1e-3 * np.abs(slope).max()
        )


def random_forms(pixels: int) -> tuple[NDArray[np.float64], ...]:
    """Informations, covariances and starts of made-up pixels."""
    rng = np.random.default_rng(8)
    root = rng.normal(0.0, 1.0, (pixels, SIZE, 9)) / KNOWN[:, None]
    information = 2.0 * root @ root.transpose(0, 2, 1) / 9.0
    own = np.tile(np.diag(KNOWN**2), (pixels, 1, 1))
    start = rng.normal(0.0, 1.0, (pixels, SIZE)) * SPREAD
    return information, own, start


def test_update_is_that_of_two_normal_laws() -> None:
    information, own, start = random_forms(5)
    rng = np.random.default_rng(9)
    alone = start + rng.normal(0.0, 1.0, start.shape) * KNOWN
    pull = (information @ alone[..., None])[..., 0]
    variance = np.array([1e-5, 0.02, 0.01, 1e-4])
    values, covariance = updated(information, pull, start, own, variance)
    drift = np.diag(variance[[0, 1, 1, 1, 1, 2, 3]])
    for p in range(5):
        prior = np.linalg.inv(own[p] + drift)
        wanted = np.linalg.inv(information[p] + prior)
        np.testing.assert_allclose(covariance[p], wanted, rtol=1e-8, atol=1e-14)
        mean = wanted @ (pull[p] + prior @ start[p])
        np.testing.assert_allclose(values[p], mean, rtol=1e-8)


def test_drift_variance_has_the_largest_marginal_likelihood() -> None:
    information, own, start = random_forms(400)
    rng = np.random.default_rng(10)
    true = np.array([4e-5, 0.03, 0.0, 0.0])
    which = [0, 1, 1, 1, 1, 2, 3]
    spread = np.linalg.inv(information) + own + np.diag(true[which])
    alone = start + np.array(
        [rng.multivariate_normal(np.zeros(SIZE), s) for s in spread]
    )
    pull = (information @ alone[..., None])[..., 0]
    largest = SPREAD[[0, 1, 5, 6]] ** 2
    found, error = drift_variance(
        information, pull, start, own, 1e-4 * largest, largest
    )
    base = np.linalg.inv(information) + own

    def loss(share: NDArray[np.float64]) -> float:
        total = base + np.diag((share * largest)[which])
        _, log = np.linalg.slogdet(total)
        left = alone - start
        square = np.einsum(
            "pi,pi->p", left, np.linalg.solve(total, left[..., None])[..., 0]
        )
        return float(0.5 * (log + square).sum() + (share / USUAL_SHARE).sum())

    best = optimize.minimize(
        loss, found / largest + 1e-3, method="L-BFGS-B", bounds=[(0.0, 1.0)] * 4
    )
    # SciPy's optimum of the same likelihood, written out in full
    assert np.all(np.abs(found - best.x * largest) < 0.1 * error)
    assert np.all(np.abs(found - true) < 4.0 * error)


def test_chance_of_a_shift() -> None:
    # two thresholds, errors 0.1 each, independent: chi-square 4.61 has chance 10 %
    # (A. Hald, Statistical Tables, 1952, table V, from memory)
    covariance = 0.01 * np.eye(2)
    shift = np.array([0.1 * np.sqrt(4.605), 0.0])
    assert chance_of_shift(shift, covariance) == pytest.approx(0.1, abs=1e-3)
