"""What the demonstration says, without running it."""

from __future__ import annotations

from dataclasses import replace
from importlib import import_module
from pathlib import Path

import numpy as np
import pytest

from spectral.demo.run import DemoOutcome, RegionResult, _regions
from spectral.demo.scenario import REGIONS, Scenario
from spectral.scans.maps import Maps

_text = import_module("spectral_cli.commands.demo")._text


@pytest.fixture
def outcome() -> DemoOutcome:
    pins = RegionResult(
        region="pins", material="Al", truth=0.0, found=6.9, error=0.1,
        single_error=1.5, flagged=0.18,
    )  # fmt: skip
    return DemoOutcome(
        files={"wedge": Path("there/wedge.h5")}, regions=(pins,), verdict="fit, but",
        exceptions=("0.7% of the pixels are bad",), threshold_error_kev=0.18,
        error_ratio=0.998, bad_found=9, bad_true=9, seconds={"check": 1.0},
    )  # fmt: skip


def test_it_names_the_exceptions_that_its_verdict_speaks_of(
    outcome: DemoOutcome,
) -> None:
    lines = _text(outcome).splitlines()
    at = lines.index("check: fit, but")
    assert lines[at + 1] == "  - 0.7% of the pixels are bad"
    assert not any(
        line.startswith("  - ")
        for line in _text(replace(outcome, exceptions=())).splitlines()
    )


def test_regions_are_compared_with_their_own_truth() -> None:
    """Estimates that are the truth itself, but for flagged ones and bad pixels."""
    region = np.repeat(np.arange(len(REGIONS)), 2)[None].repeat(3, axis=0)
    truth = np.stack([1.0 + region, 0.1 * region])
    bad = np.zeros(region.shape, bool)
    bad[0, 0] = True
    estimate = np.broadcast_to(truth, (2, *truth.shape)).copy()
    flags = np.zeros((2, *region.shape), np.uint16)
    estimate[0, :, 1, 0], flags[0, 1, 0] = 50.0, 1
    estimate[:, :, 0, 0] = 99.0
    single, zero = np.float32, np.zeros((2, *region.shape), np.float32)
    maps = Maps(
        material=("nylon", "Al"),
        exposure=np.arange(2, dtype=np.int32),
        areal_density=estimate.astype(single),
        areal_density_errors=np.ones_like(estimate, single),
        covariance=np.stack([zero] * 3, axis=1),
        calibration_errors=np.zeros_like(estimate, single),
        deviance=zero,
        flags=flags,
        process={},
    )
    scenario = Scenario.__new__(Scenario)  # the comparison needs three of its fields
    for name, value in (("region", region), ("areal_density", truth), ("bad", bad)):
        object.__setattr__(scenario, name, value)
    found = _regions(scenario, maps)
    assert [r.region for r in found[::2]] == list(REGIONS)
    for one in found:
        assert one.found == pytest.approx(one.truth)
    # five pixels in two exposures, one of their estimates flagged
    assert found[0].flagged == pytest.approx(0.1)
    assert found[0].error == pytest.approx(1.0 / 3.0)
