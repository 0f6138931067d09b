"""Threshold shifts known from elsewhere join a pixel's likelihood as data."""

from __future__ import annotations

import numpy as np

from spectral.calibration.pixel_fit import MeasuredShifts, posterior


def test_known_shift_and_counts_are_averaged_by_their_precision() -> None:
    # one threshold: parameters ln area, shift, noise variance, ln dead time
    information = np.diag([1.0, 4.0, 1.0, 1.0])[None].copy()
    pull = np.array([[0.0, 4.0 * 0.5, 0.0, 0.0]])  # counts alone say +0.5 keV
    known = MeasuredShifts(shift_kev=np.array([[-0.1]]), sigma_kev=np.array([[0.25]]))
    known.add_to(information, pull)
    wide = np.eye(4) * 1e12
    mean, covariance = posterior(information, pull, wide)
    # weighted mean of +0.5 (precision 4) and -0.1 (precision 16)
    np.testing.assert_allclose(mean[0, 1], (4 * 0.5 - 16 * 0.1) / 20, rtol=1e-9)
    np.testing.assert_allclose(covariance[0, 1, 1], 1 / 20, rtol=1e-9)


def test_unknown_pixels_change_nothing() -> None:
    information = np.eye(4)[None].copy()
    pull = np.ones((1, 4))
    MeasuredShifts(
        shift_kev=np.zeros((1, 1)), sigma_kev=np.full((1, 1), np.inf)
    ).add_to(information, pull)
    assert np.array_equal(information[0], np.eye(4))
    assert np.array_equal(pull, np.ones((1, 4)))
