"""Compiled sums over pixels against their NumPy twin and the response they sum up."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.pooled_counts import BLOCK, pooled_at
from spectral.forward.counting_model import counts_to_bins
from spectral.forward.pixel_response import curve_tables, expected_above
from spectral.kernels import pooled_reading, pooled_reading_numpy

if TYPE_CHECKING:
    from collections.abc import Callable

    from spectral.calibration.result import Calibration


def test_kernel_and_twin_agree() -> None:
    rng = np.random.default_rng(8)
    pixels, cases, thresholds, grid = 7, 6, 4, 120
    energy = 0.5 * np.arange(grid)
    height = rng.uniform(2e4, 9e4, cases)[:, None]
    curve = height * np.exp(-energy / 15.0)
    arguments = (
        curve,
        -0.1 * curve,
        0.002 * curve,
        -0.05 * curve,
        np.array([12.0, 20.0, 28.0, 37.0]),
        0.5,
        rng.normal(0.0, 0.05, (pixels, thresholds + 3)),
    )
    filled = []
    for module in (pooled_reading, pooled_reading_numpy):
        out = np.ones((cases, thresholds)), np.ones((cases, thresholds, 4))
        module.add_up(*arguments, *out)
        filled.append(out)
    for compiled, plain in zip(*filled, strict=True):
        assert np.all(compiled != 1.0)
        np.testing.assert_allclose(compiled, plain, rtol=1e-11)


def test_pooled_counts_are_those_of_all_pixels(
    make_calibration: Callable[..., Calibration],
) -> None:
    calibration = make_calibration((100, 100))
    pixel = np.arange(5, 10_000)
    assert pixel.size > BLOCK
    areal = np.array([[0.0, 0.0], [4.0, 1.0]])
    current, output, time_s = np.array([4.0, 2.0]), np.array([1.1, 0.9]), np.ones(2)
    rate = calibration.photons_per_mas * current * output
    above, slope = expected_above(
        curve_tables(calibration.model, areal, rate),
        calibration.levels_kev,
        calibration.pixels(pixel),
    )
    smooth = np.exp(calibration.residual.log_factor(areal, current))
    found, change = pooled_at(calibration, areal, current, time_s, output, pixel)
    wanted = counts_to_bins(above.sum(axis=0)) * smooth
    np.testing.assert_allclose(found, wanted, rtol=1e-11)
    wanted = counts_to_bins(slope.sum(axis=0), axis=1) * smooth[..., None]
    np.testing.assert_allclose(change, wanted, rtol=1e-9, atol=1e-9 * wanted.max())


def test_expected_bins_are_those_of_the_response(
    make_calibration: Callable[..., Calibration],
) -> None:
    calibration = make_calibration((6, 8))
    flat = np.array([3, 17, 40])
    areal = np.array([[0.0, 0.0], [4.0, 1.0]])
    current, output = np.array([4.0, 2.0]), np.array([1.1, 0.9])
    above, _ = expected_above(
        curve_tables(
            calibration.model, areal, calibration.photons_per_mas * current * output
        ),
        calibration.levels_kev,
        calibration.pixels(flat),
    )
    smooth = np.exp(calibration.residual.log_factor(areal, current))
    np.testing.assert_allclose(
        calibration.expected_bins(areal, current, output, flat),
        counts_to_bins(above) * smooth,
        rtol=1e-11,
    )
