"""A small scan of a made-up detector, for tests that need counts and no physics."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

import numpy as np
import pytest

from spectral.scans.scan import CountsInMemory, Filter, Layer, Scan

if TYPE_CHECKING:
    from numpy.typing import NDArray

THRESHOLDS_KEV = (20.0, 32.0, 45.0, 58.0)
WEDGE_MM = [(p, a) for p in (0.0, 10.0, 25.0, 50.0) for a in (0.0, 1.0, 4.0)][1:]


class MakeScan(Protocol):
    """Returns a scan; `open_counts` is the mean at the lowest threshold."""

    def __call__(
        self,
        *,
        seed: int = 1,
        pixels: tuple[int, int] = (32, 40),
        open_counts: float = 20_000.0,
        opens: int = 4,
        darks: int = 2,
        wedge: bool = True,
        objects: int = 0,
        loss: float = 0.0,
        drift: float = 0.0,
    ) -> Scan: ...


def _attenuation(energy: NDArray[np.float64]) -> NDArray[np.float64]:
    """Two laws that fall with energy, in 1/mm; they resemble no material."""
    return np.array(
        [0.016 + 0.02 * (energy / 30) ** -3, 0.05 + 0.25 * (energy / 30) ** -3]
    )


def _expected(
    rng: np.random.Generator,
    thickness: NDArray[np.float64],
    beam: NDArray[np.float64],
    pixels: int,
    open_counts: float,
    loss: float,
) -> NDArray[np.float64]:
    """Mean counts in bins, shape (exposure, bin, pixel), every pixel a bit other."""
    energy = np.arange(12.0, 90.0, 3.0)
    spectrum = (energy - 9.0) * (90.0 - energy)
    passed = spectrum * np.exp(-thickness @ _attenuation(energy))
    edge = np.add.outer(rng.normal(0, 0.6, pixels), np.array(THRESHOLDS_KEV))
    above = 1 / (1 + np.exp(-(energy - edge[..., None]) / 1.5))
    bins = above - np.concatenate([above[:, 1:], 0 * above[:, :1]], axis=1)
    mean = np.einsum("ne,pke->nkp", passed, bins)
    mean *= open_counts / mean[0].sum(0).mean() * rng.normal(1, 0.03, pixels)
    rate = mean.sum(1) / open_counts * beam[:, None]
    dead = loss * rng.normal(1, 0.05, pixels)
    kept = beam[:, None] * np.exp(-dead * rate)
    counts: NDArray[np.float64] = mean * kept[:, None]
    return counts


@pytest.fixture(scope="session")
def make_scan() -> MakeScan:
    """A function that makes a scan of sound pixels."""

    def make(
        *,
        seed: int = 1,
        pixels: tuple[int, int] = (32, 40),
        open_counts: float = 20_000.0,
        opens: int = 4,
        darks: int = 2,
        wedge: bool = True,
        objects: int = 0,
        loss: float = 0.0,
        drift: float = 0.0,
    ) -> Scan:
        rng = np.random.default_rng(seed)
        steps = WEDGE_MM if wedge else []
        before = (opens + 1) // 2
        thickness = np.array(
            [(0.0, 0.0)] * before
            + list(steps)
            + [(0.0, 0.0)] * (opens - before)
            + [(20.0, 2.0)] * objects
        )
        role = ["open"] * before + ["wedge"] * len(steps)
        role += ["open"] * (opens - before) + ["object"] * objects
        beam = np.linspace(1.0, 1.0 + drift, len(thickness))
        half = [0, opens - 1] if opens > 2 and wedge else []
        half = [i if i == 0 else len(steps) + opens - 1 for i in half]
        beam[half] *= 0.5
        y, x = pixels
        mean = _expected(rng, thickness, beam, y * x, open_counts, loss)
        bins = rng.poisson(mean)
        above = np.cumsum(bins[:, ::-1], axis=1)[:, ::-1]
        counts = np.concatenate([np.zeros((darks, *above.shape[1:]), int), above])
        known = np.concatenate([np.zeros((darks, 2)), thickness])
        known[[i for i, r in enumerate(["dark"] * darks + role) if r == "object"]] = (
            np.nan
        )
        current = np.full(len(counts), 3.0)
        current[[darks + i for i in half]] = 1.5
        current[:darks] = 0.0
        return Scan(
            counts=CountsInMemory(
                counts.reshape(-1, len(THRESHOLDS_KEV), y, x).astype(np.uint32)
            ),
            thresholds_kev=np.array(THRESHOLDS_KEV),
            role=tuple(["dark"] * darks + role),
            thickness_mm=known,
            materials=(
                Layer(name="PMMA", formula="C5H8O2", density_g_cm3=1.19),
                Layer(name="Al", formula="Al", density_g_cm3=2.7),
            ),
            count_time_s=np.full(len(counts), 0.5),
            current_ma=current,
            voltage_kv=90.0,
            filters=(Filter(material="Al", thickness_mm=2.0),),
            sensor_material="CdTe",
            sensor_thickness_mm=1.0,
            pixel_size_um=(100.0, 100.0),
            pixel_mask=np.zeros(pixels, np.uint32),
            title="a made-up detector",
        )

    return make
