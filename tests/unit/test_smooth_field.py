"""Smooth change over the field: found where it is, not where it is not."""

from __future__ import annotations

import numpy as np

from spectral.calibration.smooth_field import field_terms, smooth_field

SHAPE = (20, 25)
FLAT = np.arange(500)


def test_planted_slope_is_found_and_noise_is_left_alone() -> None:
    rng = np.random.default_rng(3)
    row = FLAT // SHAPE[1] / (SHAPE[0] - 1.0) - 0.5
    noise = rng.normal(0.0, 0.02, (500, 2))
    values = noise + np.stack([0.1 * row, np.zeros(500)], axis=1)
    field = smooth_field(values, field_terms(FLAT, SHAPE))
    # six terms share the noise: sd 0.02 * sqrt(5 / 500) in each place on average
    assert np.sqrt(np.mean((field[:, 0] - 0.1 * row) ** 2)) < 0.004
    assert np.all(field[:, 1] == 0.0)


def test_noise_alone_gets_no_field() -> None:
    rng = np.random.default_rng(4)
    values = rng.normal(0.0, 1.0, (500, 200))
    assert np.all(smooth_field(values, field_terms(FLAT, SHAPE)) == 0.0)


def test_too_few_pixels_get_no_field() -> None:
    few = np.arange(12)
    values = np.linspace(0.0, 1.0, 12)[:, None]
    assert np.all(smooth_field(values, field_terms(few, (3, 4))) == 0.0)


def test_one_row_of_pixels_gets_no_field() -> None:
    line = np.arange(100)
    values = np.linspace(0.0, 1.0, 100)[:, None]
    assert np.all(smooth_field(values, field_terms(line, (1, 100))) == 0.0)
