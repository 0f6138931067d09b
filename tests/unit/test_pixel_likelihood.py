"""The compiled likelihood of pixel departures against its NumPy twin."""

from __future__ import annotations

import numpy as np

from spectral.kernels import pixel_likelihood, pixel_likelihood_numpy


def test_kernel_and_twin_agree() -> None:
    rng = np.random.default_rng(8)
    pixels, exposures, bins, grid = 7, 6, 4, 120
    energy = 0.5 * np.arange(grid)
    height = rng.uniform(2e4, 9e4, exposures)[:, None]
    curve = height * np.exp(-energy / 15.0)
    shared = (
        curve,
        -0.1 * curve,
        0.002 * curve,
        -0.05 * curve,
        np.array([12.0, 20.0, 28.0, 37.0]),
        0.5,
        rng.normal(0.0, 0.05, (pixels, bins + 3)),
        1.0 + rng.normal(0.0, 0.01, (exposures, bins)),
        np.full(exposures, 2e-6),
        np.full(exposures, 0.3),
    )
    counts = rng.poisson(3000.0, (pixels, exposures, bins)).astype(float)
    counts[0, 0, 0] = 0.0
    filled = []
    for module in (pixel_likelihood, pixel_likelihood_numpy):
        out = (
            np.empty((pixels, bins + 3, bins + 3)),
            np.empty((pixels, bins + 3)),
            np.empty(pixels),
            np.zeros((exposures, bins)),
        )
        module.summarise(counts, *shared, *out)
        alone = np.zeros((exposures, bins))
        module.add_expected(*shared[:7], shared[-1], alone)
        filled.append((*out, alone))
    np.testing.assert_array_equal(filled[0][3], filled[0][4])
    for compiled, plain in zip(*filled, strict=True):
        np.testing.assert_allclose(compiled, plain, rtol=1e-10)
