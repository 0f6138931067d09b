"""The compiled shift by calibration errors against its NumPy twin."""

from __future__ import annotations

import numpy as np

from spectral.kernels import calibration_shift, calibration_shift_numpy
from spectral.kernels.node_weights import node_weights


def test_kernel_and_twin_agree() -> None:
    rng = np.random.default_rng(2)
    pixels, bins, nodes, grid, materials = 9, 4, 6, 100, 2
    energy = 0.5 * np.arange(grid)
    height = rng.uniform(1e3, 5e3, (bins, 1, 1, nodes))
    curve = height * np.exp(-energy / 12.0)[None, None, :, None]
    kinds = np.array([1.0, -0.1, 0.003, -0.05])[None, :, None, None]
    size = bins + 3
    root = rng.normal(0.0, 0.1, (pixels, size, size))
    lean = rng.normal(0.0, 0.1, (pixels, materials, materials))
    tables, levels = kinds * curve, np.array([10.0, 17.0, 25.0, 36.0])
    departures = rng.normal(0.0, 0.05, (pixels, size))
    weight = np.empty((pixels, bins, nodes))
    node_weights(tables, levels, 0.5, departures, 0.3, weight)
    arguments = (
        levels,
        0.5,
        rng.uniform(0.1, 2.0, (nodes, materials)),
        departures,
        (root @ root.transpose(0, 2, 1)).astype(np.float32),
        weight,
        rng.uniform(0.0, 2.0, (pixels, materials)),
        lean @ lean.transpose(0, 2, 1),
        2e-6,
        0.3,
    )
    results = []
    for module, given in (
        (calibration_shift, tables.astype(np.float32)),
        (calibration_shift_numpy, tables),
    ):
        errors, extra = np.empty((pixels, materials)), np.empty(pixels)
        seen = np.empty(pixels)
        module.shifts(given, *arguments, errors, extra, seen)
        results.append((errors, extra, seen))
    np.testing.assert_allclose(results[0][0], results[1][0], rtol=1e-5)
    np.testing.assert_allclose(results[0][1], results[1][1], rtol=1e-5)
    np.testing.assert_allclose(results[0][2], results[1][2], rtol=1e-9)
    assert (results[0][0] > 0.0).all()
