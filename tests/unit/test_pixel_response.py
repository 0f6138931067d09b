"""Reading curves, departures of pixels, and counts in bins."""

from __future__ import annotations

import numpy as np
import pytest

from spectral.errors import InputError
from spectral.forward.counting_model import (
    CountingModel,
    counts_to_bins,
    cubic_weights,
)
from spectral.forward.pixel_response import (
    CurveTables,
    PixelDepartures,
    departure_names,
    expected_above,
    read_pixels,
)


def cubic(level: np.ndarray) -> np.ndarray:
    return np.asarray(2.0 - 0.3 * level + 0.05 * level**2 - 0.002 * level**3)


def test_reading_is_exact_for_cubics() -> None:
    grid = 0.5 * np.arange(80)
    level = np.random.default_rng(1).uniform(0.5, 38.5, 200)
    first, value, slope = cubic_weights(level, 0.5, 80)
    points = cubic(grid)[first[:, None] + np.arange(4)]
    np.testing.assert_allclose((points * value).sum(axis=1), cubic(level), atol=1e-10)
    exact = -0.3 + 0.1 * level - 0.006 * level**2
    np.testing.assert_allclose((points * slope).sum(axis=1), exact, atol=1e-10)


def test_weights_add_up_and_grid_points_are_read_off() -> None:
    level = np.random.default_rng(2).uniform(1.0, 30.0, (5, 7))
    first, value, slope = cubic_weights(level, 0.5, 80)
    assert first.shape == (5, 7)
    assert value.shape == slope.shape == (5, 7, 4)
    np.testing.assert_allclose(value.sum(axis=-1), 1.0, atol=1e-14)
    np.testing.assert_allclose(slope.sum(axis=-1), 0.0, atol=1e-13)
    first, value, _ = cubic_weights(np.array([12.5]), 0.5, 80)
    assert first[0] == 24
    np.testing.assert_allclose(value[0], [0.0, 1.0, 0.0, 0.0], atol=1e-15)


def test_levels_off_the_grid_read_its_ends() -> None:
    first, value, _ = cubic_weights(np.array([-3.0, 1e3]), 0.5, 80)
    assert first.min() == 0
    assert first.max() + 3 == 79
    np.testing.assert_allclose(value.sum(axis=-1), 1.0)


def test_counts_in_bins_are_differences() -> None:
    above = np.array([[10.0, 6.0, 1.0], [3.0, 3.0, 0.0]])
    np.testing.assert_array_equal(counts_to_bins(above), [[4, 5, 1], [0, 3, 0]])
    np.testing.assert_array_equal(
        counts_to_bins(above, axis=0), above - [above[1], [0, 0, 0]]
    )


def tables() -> CurveTables:
    """Curves that are cubic in the level, so that reading them is exact."""
    grid = 0.5 * np.arange(160)
    base = np.stack([1000.0 - 8.0 * grid, 400.0 - 2.0 * grid])
    return CurveTables(
        curve=base,
        by_rate=-0.1 * base,
        by_variance=0.02 * base,
        by_dead_time=-0.2 * base,
        step_kev=0.5,
    )


def test_a_pixel_counts_by_the_stated_form() -> None:
    values = np.array([[np.log(1.1), 0.7, -0.4, 0.3, 0.05]])
    levels = np.array([20.0, 40.0])
    above, _ = expected_above(tables(), levels, PixelDepartures(values=values))
    own = levels + np.array([0.7, -0.4])
    factor = 1.1 * (1.0 - 0.1 * np.log(1.1) + 0.3 * 0.02 - 0.05 * 0.2)
    expected = np.stack([1000.0 - 8.0 * own, 400.0 - 2.0 * own]) * factor
    np.testing.assert_allclose(above[0], expected, rtol=1e-12)


def test_reading_some_thresholds_equals_reading_all() -> None:
    rng = np.random.default_rng(4)
    pixels = PixelDepartures(values=rng.normal(0.0, 0.1, (5, 6)))
    levels = np.array([15.0, 30.0, 50.0])
    whole, change = read_pixels(tables(), levels, pixels)
    some, few = read_pixels(tables(), levels, pixels, thresholds=slice(1, 3))
    np.testing.assert_array_equal(some, whole[:, :, 1:])
    np.testing.assert_array_equal(few, change[:, :, 1:])


def test_departures_stand_in_their_order() -> None:
    pixels = PixelDepartures(values=np.arange(12.0).reshape(2, 6))
    assert departure_names(3) == (
        "ln_area",
        "shift_1_kev",
        "shift_2_kev",
        "shift_3_kev",
        "variance_kev2",
        "ln_dead_time",
    )
    assert pixels.thresholds == 3
    assert pixels.ln_area.tolist() == [0, 6]
    assert pixels.shift_kev.tolist() == [[1, 2, 3], [7, 8, 9]]
    assert pixels.variance_kev2.tolist() == [4, 10]
    assert pixels.ln_dead_time.tolist() == [5, 11]


def test_a_brighter_beam_is_a_larger_area_and_leaves_the_rest() -> None:
    pixels = PixelDepartures(values=np.zeros((2, 6)))
    brighter = pixels.brightened(1.2)
    np.testing.assert_allclose(brighter.ln_area, np.log(1.2))
    assert not brighter.values[:, 1:].any()
    assert not pixels.values.any()


def test_scaled_tables_scale_every_curve() -> None:
    doubled = tables().scaled(np.array([2.0, 3.0]))
    for name in ("curve", "by_rate", "by_variance", "by_dead_time"):
        ratio = getattr(doubled, name) / getattr(tables(), name)
        np.testing.assert_allclose(ratio[:, 0], [2.0, 3.0])


def test_wrong_number_of_materials_is_refused(counting_model: CountingModel) -> None:
    with pytest.raises(InputError, match="has 3 materials, the model has 2"):
        counting_model.transmitted(np.zeros((1, 3)))


def test_dead_time_factor_reaches_all_times_of_the_pulse(
    counting_model: CountingModel,
) -> None:
    slower = counting_model.with_dead_time(2.0).shape
    assert (slower.dead_time_ns, slower.tail_ns) == (300.0, 60.0)
    assert slower.tail_height == counting_model.shape.tail_height
