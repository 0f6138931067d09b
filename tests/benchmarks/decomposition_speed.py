"""Speed and accuracy of the decomposition beside other methods: one table.

Run ``python tests/benchmarks/decomposition_speed.py``; see README.md beside it.
"""

from __future__ import annotations

import os

for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_variable] = "1"

import argparse
import platform
import sys
import time
import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import optimize
from sklearn.exceptions import ConvergenceWarning
from sklearn.linear_model import LinearRegression
from sklearn.neural_network import MLPRegressor
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import PolynomialFeatures, StandardScaler

from spectral.decomposition.likelihood import (
    count_derivatives,
    cramer_rao_bound,
    expected_counts,
    fisher_information,
)
from spectral.decomposition.solver import solve
from spectral.decomposition.start_values import StartRegression

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Method = Callable[[int], Array]

REGIONS = 16
RUNS = 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scene:
    """Made-up pixels, each in one of `REGIONS` regions of one composition.

    counts[pixel, bin], weight[pixel, bin, node], attenuation[node, material],
    truth[pixel, material], region[pixel], bound[pixel, material] in g/cm2.
    """

    counts: Array
    weight: Array
    attenuation: Array
    truth: Array
    region: NDArray[np.intp]
    bound: Array


def make_scene(materials: int, bins: int, pixels: int, counts: float) -> Scene:
    """Scene whose thinnest-to-thickest mean is about `counts` detected per pixel."""
    rng = np.random.default_rng(17)
    energy = np.linspace(22.0, 118.0, 16)
    spectrum = (120.0 - energy) * np.exp(-((28.0 / energy) ** 3))
    columns = (
        0.18 + 0.8 * (20.0 / energy) ** 3,
        0.15 + 6.0 * (20.0 / energy) ** 3,
        np.where(energy > 33.2, 40.0, 8.0) * (33.2 / energy) ** 2.7,
    )
    attenuation = np.stack(columns[:materials], axis=1)
    edges = np.array([20.0, 35.0, 50.0, 62.0, 78.0, 95.0])[:bins]
    moved = edges + rng.normal(0.0, 0.7, (pixels, bins))
    above = 1.0 / (1.0 + np.exp((moved[:, :, None] - energy) / 3.0))
    above *= rng.normal(1.0, 0.03, (pixels, 1, 1))
    weight = np.concatenate((above[:, :-1] - above[:, 1:], above[:, -1:]), axis=1)
    weight *= spectrum
    region = rng.integers(0, REGIONS, pixels)
    low, high = np.array([0.5, 0.05, 0.002]), np.array([8.0, 1.0, 0.03])
    low, high = low[:materials], high[:materials]
    truth = (low + (high - low) * rng.random((REGIONS, materials)))[region]
    expected = expected_counts(truth, weight, attenuation)
    scale = counts / expected.sum(axis=1).mean()
    weight, expected = weight * scale, expected * scale
    slope = count_derivatives(truth, weight, attenuation)[0]
    bound = cramer_rao_bound(fisher_information(expected, slope))
    return Scene(
        counts=rng.poisson(expected).astype(np.float64),
        weight=weight,
        attenuation=attenuation,
        truth=truth,
        region=region,
        bound=np.sqrt(np.einsum("pjj->pj", bound)),
    )


def compiled(scene: Scene, **options: object) -> Method:
    """Our kernel."""
    start = StartRegression.fit(scene.weight[:2000], scene.attenuation)
    shared = bool(options.pop("shared", False))
    kind = np.float64 if options.pop("double", False) else np.float32
    weight = scene.weight.mean(axis=0, keepdims=True) if shared else scene.weight
    weight = np.ascontiguousarray(weight, kind)

    def run(pixels: int) -> Array:
        return solve(
            scene.counts[:pixels],
            weight if shared else weight[:pixels],
            scene.attenuation,
            start=start,
            **options,  # type: ignore[arg-type]
        ).areal_density

    return run


def pixel_by_pixel(scene: Scene, method: str) -> Method:
    """SciPy's general optimisers, one pixel after another."""
    middle = scene.truth.mean(axis=0)

    def pearson(a: Array, n: Array, weight: Array) -> Array:
        expected = np.maximum(expected_counts(a, weight, scene.attenuation), 1e-9)
        return np.asarray((n - expected) / np.sqrt(expected))

    def loss(a: Array, n: Array, weight: Array) -> tuple[float, Array]:
        expected = np.maximum(expected_counts(a, weight, scene.attenuation), 1e-9)
        slope = count_derivatives(a, weight, scene.attenuation)[0]
        value = float((expected - n * np.log(expected)).sum())
        return value, np.asarray(slope.T @ (1.0 - n / expected))

    def value(a: Array, n: Array, weight: Array) -> float:
        return loss(a, n, weight)[0]

    def run(pixels: int) -> Array:
        found = np.empty((pixels, len(middle)))
        for p in range(pixels):
            given = (scene.counts[p], scene.weight[p])
            if method == "least_squares":
                found[p] = optimize.least_squares(pearson, middle, args=given).x
            else:
                slopes = method == "L-BFGS-B"
                found[p] = optimize.minimize(
                    loss if slopes else value,
                    middle,
                    args=given,
                    jac=slopes,
                    method="L-BFGS-B",
                ).x
        return found

    return run


def vectorised(scene: Scene) -> Method:
    """Fisher scoring written with NumPy on all pixels at once, five steps."""
    start = StartRegression.fit(scene.weight[:2000], scene.attenuation)

    def run(pixels: int) -> Array:
        found = np.empty((pixels, scene.attenuation.shape[1]))
        for first in range(0, pixels, 4096):
            part = slice(first, min(first + 4096, pixels))
            n, weight = scene.counts[part], scene.weight[part]
            a = start.predict(n, weight)
            for _ in range(5):
                parts = weight * np.exp(-a @ scene.attenuation.T)[:, None, :]
                expected, slope = parts.sum(axis=2), -(parts @ scene.attenuation)
                scaled = slope / expected[:, :, None]
                information = np.swapaxes(slope, 1, 2) @ scaled
                score = np.einsum("pbj,pb->pj", scaled, n - expected)
                a = a + np.linalg.solve(information, score[:, :, None])[:, :, 0]
            found[part] = a
        return found

    return run


def learned(scene: Scene, regressor: str) -> Method:
    """Regression of areal density on the logarithms of the counts."""
    rng = np.random.default_rng(3)
    low, high = scene.truth.min(axis=0), scene.truth.max(axis=0)
    margin = 0.1 * (high - low)
    drawn = rng.uniform(low - margin, high + margin, (20_000, len(low)))
    weight = scene.weight.mean(axis=0)
    counts = rng.poisson(expected_counts(drawn, weight, scene.attenuation))
    opened = weight.sum(axis=1)
    scale = scene.bound.mean(axis=0)
    if regressor == "cubic":
        model = make_pipeline(PolynomialFeatures(3), LinearRegression())
    else:
        net = MLPRegressor(
            hidden_layer_sizes=(32, 32),
            max_iter=60,
            random_state=1,
            early_stopping=True,
        )
        model = make_pipeline(StandardScaler(), net)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ConvergenceWarning)
        model.fit(np.log((counts + 0.5) / opened), drawn / scale)

    def run(pixels: int) -> Array:
        n = scene.counts[:pixels]
        return np.asarray(model.predict(np.log((n + 0.5) / opened)) * scale)

    return run


def timed(method: Method, pixels: int, *, wall: bool) -> tuple[Array, float]:
    """Result and the shortest time for one pixel, in s."""
    clock = time.perf_counter if wall else time.process_time
    found, best = method(min(pixels, 500)), np.inf
    for _ in range(RUNS if pixels > 500 else 1):
        before = clock()
        found = method(pixels)
        best = min(best, clock() - before)
    return found, best / pixels


def judged(found: Array, scene: Scene) -> tuple[float, float]:
    """Worst material's RMSE over the bound; worst region's and material's bias."""
    pixels = len(found)
    error = (found - scene.truth[:pixels]) / scene.bound[:pixels]
    rmse = np.sqrt((error**2).mean(axis=0)).max()
    bias = 0.0
    for k in range(REGIONS):
        here = scene.region[:pixels] == k
        if here.sum() > 1000:
            bias = max(bias, float(np.abs(error[here].mean(axis=0)).max()))
    return float(rmse), bias if bias > 0.0 else float("nan")


def methods(scene: Scene, pixels: int) -> list[tuple[str, Method, int, bool]]:
    """Name, method, pixels it is given, and whether wall time counts."""
    few = 200
    return [
        ("our kernel, pixel weights", compiled(scene), pixels, False),
        (
            "  without bias correction",
            compiled(scene, bias_correction=False),
            pixels,
            False,
        ),
        ("  in double precision", compiled(scene, double=True), pixels, False),
        ("  one shared weight", compiled(scene, shared=True), pixels, False),
        ("  two threads (wall time)", compiled(scene, threads=2), pixels, True),
        ("NumPy Fisher scoring", vectorised(scene), pixels // 4, False),
        ("cubic polynomial, sklearn", learned(scene, "cubic"), pixels, False),
        ("perceptron 32+32, sklearn", learned(scene, "perceptron"), pixels, False),
        ("SciPy L-BFGS-B per pixel", pixel_by_pixel(scene, "L-BFGS-B"), few, False),
        ("  slopes by differences", pixel_by_pixel(scene, "differences"), few, False),
        ("SciPy least_squares", pixel_by_pixel(scene, "least_squares"), few, False),
    ]


def table(materials: int, bins: int, pixels: int, counts: float) -> list[str]:
    """Lines of the table for one scene."""
    scene = make_scene(materials, bins, pixels, counts)
    detected = scene.counts.sum(axis=1).mean()
    title = f"{materials} materials, {bins} bins, 16 nodes, {pixels} pixels"
    heads = f"{'Mpixel/s':>10}{'times slower':>14}{'RMSE/bound':>12}{'bias':>8}"
    lines = [f"{title}, {detected:.0f} counts per pixel", f"{'method':28}{heads}"]
    first = 0.0
    for name, method, given, wall in methods(scene, pixels):
        found, seconds = timed(method, given, wall=wall)
        first = first or seconds
        rmse, bias = judged(found, scene)
        lines.append(
            f"{name:28}{1e-6 / seconds:10.4f}{seconds / first:14.2f}"
            f"{rmse:12.3f}{bias:8.3f}"
        )
    _, seconds = timed(lambda k: scene.weight[:k].copy(), pixels, wall=False)
    lines.append(
        f"{'copying the weights':28}{1e-6 / seconds:10.4f}{seconds / first:14.2f}"
    )
    return lines


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pixels", type=int, default=1 << 17)
    parser.add_argument("--counts", type=float, default=2000.0)
    given = parser.parse_args()
    out = [f"Python {platform.python_version()}, NumPy {np.__version__}"]
    for materials, bins in ((2, 5), (3, 6)):
        counts = given.counts * (1.0 if materials == 2 else 20.0)
        out += ["", *table(materials, bins, given.pixels, counts)]
    sys.stdout.write("\n".join(out) + "\n")


if __name__ == "__main__":
    main()
