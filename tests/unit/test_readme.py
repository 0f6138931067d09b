"""The script in the README is one that a user can start from."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
import tifffile

from spectral.errors import SpectralError
from spectral.scans.scan_check import check_scan
from spectral.scans.script import open_scan

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def script(tmp_path: Path) -> Path:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    (block,) = re.findall(r"```toml\n(.*?)```", text, re.DOTALL)
    path = tmp_path / "wedge.toml"
    path.write_text(block, encoding="utf-8")
    return path


def test_its_images_are_read_in_the_order_it_says(script: Path) -> None:
    rng = np.random.default_rng(1)
    (script.parent / "images").mkdir()
    levels = np.array([4000.0, 2000.0, 1000.0, 400.0, 100.0])
    between = -np.diff(levels, append=0.0)
    share = (0.0, 1.0, 1.0, 0.5, 0.8, 0.5)
    for i, part in enumerate(share):
        bins = rng.poisson(part * between[:, None, None], (5, 12, 16))
        pages = bins[::-1].cumsum(axis=0)[::-1]  # a pulse counts at all below it
        tifffile.imwrite(
            script.parent / "images" / f"{i + 1:03d}.tif", pages.astype(np.uint16)
        )
    scan = open_scan(script)
    assert scan.role == ("dark", "open", "open", "open", "wedge", "wedge")
    assert scan.thickness_mm[5].tolist() == [10.0, 2.0]
    counts = scan.counts.read([4])[0]
    np.testing.assert_allclose(counts.mean(axis=(1, 2)), 0.8 * levels, rtol=0.05)
    check = check_scan(scan)
    assert check.verdict.value.startswith("fit"), check.causes


def test_what_it_lacks_without_images(script: Path) -> None:
    with pytest.raises(SpectralError, match=r"there is no image .*001\.tif"):
        open_scan(script)


def test_every_path_it_names_is_there() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    for name in ("calibrations/detector_cdte.toml", "examples/", "DEVELOPERS.md"):
        assert name in text
        assert (ROOT / name).exists()
