"""Scripts and images that are damaged, and what reading them says."""

from __future__ import annotations

import logging
from typing import TYPE_CHECKING

import h5py
import numpy as np
import pytest
import tifffile

from spectral.errors import FileFormatError, ScanError
from spectral.scans.image_files import ImageFile, read_pages
from spectral.scans.maps import Maps
from spectral.scans.maps_file import read_maps, write_maps
from spectral.scans.script import open_scan, read_script

if TYPE_CHECKING:
    from pathlib import Path

SCRIPT = """
[source]
voltage_kv = 90
[detector]
thresholds_kev = [20, 40]
[[material]]
name = "PMMA"
formula = "C5H8O2"
density_g_cm3 = 1.19
[defaults]
count_time_s = 1
files = "{exposure}_{threshold}.tif"
[[exposure]]
role = "open"
"""


def written(folder: Path, *changes: tuple[str, str]) -> Path:
    text = SCRIPT
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path = folder / "scan.toml"
    path.write_text(text)
    for threshold in (1, 2):
        image = np.full((6, 8), 100 // threshold, np.uint16)
        tifffile.imwrite(folder / f"1_{threshold}.tif", image)
    return path


def test_a_density_beyond_all_is_refused(tmp_path: Path) -> None:
    path = written(tmp_path, ("1.19", "1190"))
    with pytest.raises(
        ScanError, match="line 9: density_g_cm3 is 1190; nothing has 25"
    ):
        read_script(path)


def test_an_open_exposure_with_a_layer_is_refused(tmp_path: Path) -> None:
    layer = ('role = "open"', 'role = "open"\nlayers_mm = { PMMA = 3.0 }')
    with pytest.raises(ScanError, match="line 15: an open exposure has nothing in the"):
        read_script(written(tmp_path, layer))


def test_a_step_behind_which_nothing_counts_is_refused(tmp_path: Path) -> None:
    step = ('role = "open"', 'role = "wedge"\nlayers_mm = { PMMA = 1e9 }')
    words = r"line 15: layers_mm says 1e\+09 mm of PMMA, behind which nothing counts"
    with pytest.raises(ScanError, match=words):
        read_script(written(tmp_path, step))


def test_a_detector_of_text_is_refused(tmp_path: Path) -> None:
    (tmp_path / "detector.toml").write_text("[sensor]\nthickness_um = 'thick'\n")
    use = ("[detector]", '[detector]\nuse = "detector.toml"')
    with pytest.raises(
        ScanError, match=r"detector.toml.*thickness_um must be a number"
    ):
        read_script(written(tmp_path, use))


def test_a_mask_that_is_missing_names_the_script(tmp_path: Path) -> None:
    path = written(tmp_path, ("[detector]", '[detector]\npixel_mask = "none.tif"'))
    with pytest.raises(FileFormatError, match=r"scan.toml: pixel_mask: there is no im"):
        open_scan(path)


def test_a_truncated_image_is_one_sentence(
    tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    written(tmp_path)
    image = tmp_path / "1_1.tif"
    image.write_bytes(image.read_bytes()[:200])
    loud = logging.getLogger("tifffile")
    assert any(isinstance(h, logging.NullHandler) for h in loud.handlers)
    with pytest.raises(FileFormatError, match="the file is damaged or changed"):
        read_pages(ImageFile(image), [0])
    assert capfd.readouterr().err == ""


def test_maps_with_too_few_flags_are_damaged(tmp_path: Path) -> None:
    shape = (2, 1, 3, 4)
    fields = dict.fromkeys(
        ("areal_density", "areal_density_errors", "covariance", "calibration_errors"),
        np.ones(shape, np.float32),
    )
    maps = Maps(
        material=("PMMA",),
        exposure=np.arange(2, dtype=np.int32),
        deviance=np.ones((2, 3, 4), np.float32),
        flags=np.zeros((2, 3, 4), np.uint16),
        process={},
        **fields,
    )
    path = tmp_path / "maps.h5"
    write_maps(maps, path)
    with h5py.File(path, "r+") as file:
        kept = file["entry/maps/flags"][:1]
        del file["entry/maps/flags"]
        file["entry/maps/flags"] = kept
    with pytest.raises(FileFormatError, match="flags cannot be read: the file is dam"):
        read_maps(path, which=[1])
