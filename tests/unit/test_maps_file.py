"""The maps file: what comes back, what it says of itself, and what it refuses."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import h5py
import numpy as np
import pytest

from spectral.errors import FileFormatError, InputError
from spectral.scans.flags import MEANING, PixelFlag
from spectral.scans.maps import Maps
from spectral.scans.maps_file import FIELD_UNITS, read_maps, write_maps

if TYPE_CHECKING:
    from pathlib import Path


@pytest.fixture
def maps() -> Maps:
    rng = np.random.default_rng(2)

    def some(*shape: int) -> np.ndarray[tuple[int, ...], np.dtype[np.float32]]:
        return rng.normal(size=shape).astype(np.float32)

    density = some(3, 2, 70, 5)
    flags = np.zeros((3, 70, 5), np.uint16)
    density[1, :, 2, 3] = np.nan
    flags[1, 2, 3] = PixelFlag.BAD_PIXEL
    flags[2] = PixelFlag.MISFIT
    return Maps(
        material=("PE", "Al"),
        exposure=np.array([4, 5, 9], np.int32),
        areal_density=density,
        areal_density_errors=some(3, 2, 70, 5),
        covariance=some(3, 3, 70, 5),
        calibration_errors=some(3, 2, 70, 5),
        deviance=some(3, 70, 5),
        flags=flags,
        process={"options": "none", "scan digest": "ab12", "version": "9.9"},
    )


def test_what_was_written_comes_back(maps: Maps, tmp_path: Path) -> None:
    write_maps(maps, tmp_path / "maps.h5")
    back = read_maps(tmp_path / "maps.h5")
    for name in (*FIELD_UNITS, "exposure"):
        came, want = getattr(back, name), getattr(maps, name)
        assert came.dtype == want.dtype
        assert np.array_equal(came, want, equal_nan=name != "flags"), name
    assert back.material == maps.material
    assert back.process.pop("date").startswith("20")
    assert back.process == {"program": "wedgewright", **maps.process}


def test_some_exposures(maps: Maps, tmp_path: Path) -> None:
    write_maps(maps, tmp_path / "maps.h5")
    back = read_maps(tmp_path / "maps.h5", which=[2, 0])
    assert back.exposure.tolist() == [9, 4]
    assert np.array_equal(back.covariance, maps.covariance[[2, 0]])
    with pytest.raises(InputError, match="holds 3 exposures, positions 0 to 2"):
        read_maps(tmp_path / "maps.h5", which=[3])


def test_the_file_explains_itself(maps: Maps, tmp_path: Path) -> None:
    write_maps(maps, tmp_path / "maps.h5")
    with h5py.File(tmp_path / "maps.h5") as file:
        assert file.attrs["default"] == "entry"
        assert file["entry"].attrs["default"] == "maps"
        group = file["entry/maps"]
        assert group.attrs["signal"] == "areal_density"
        assert list(group.attrs["axes"]) == ["exposure", "material", ".", "."]
        assert {n: group[n].dtype.name for n in ("exposure", "flags")} == {
            "exposure": "int32",
            "flags": "uint16",
        }
        for name, unit in FIELD_UNITS.items():
            assert group[name].attrs.get("units", "") == unit
        flags = group["flags"].attrs
        names = flags["flag_meanings"].split()
        assert dict(zip(names, flags["flag_masks"].tolist(), strict=True)) == {
            f.name: int(f) for f in MEANING
        }
        for flag, meaning in MEANING.items():
            assert flags[flag.name] == meaning
        process = file["entry/process"]
        assert process.attrs["NX_class"] == "NXprocess"
        assert process["note_1"].attrs["NX_class"] == "NXnote"
        assert process["note_1/description"][()] == b"options"


def test_nan_without_a_flag_is_refused(maps: Maps, tmp_path: Path) -> None:
    flags = np.zeros_like(maps.flags)
    with pytest.raises(InputError, match=r"exposure 5 is not a number in row 2, col"):
        write_maps(replace(maps, flags=flags), tmp_path / "maps.h5")
    flags = maps.flags.copy()
    flags[0, 0, 0] = 1 << 15
    with pytest.raises(InputError, match="which have no meaning"):
        write_maps(replace(maps, flags=flags), tmp_path / "maps.h5")
    assert list(tmp_path.iterdir()) == []


def test_nan_without_a_flag_in_a_file_is_refused(maps: Maps, tmp_path: Path) -> None:
    path = tmp_path / "maps.h5"
    write_maps(maps, path)
    with h5py.File(path, "r+") as file:
        file["entry/maps/flags"][1, 2, 3] = 0
    words = "maps.h5: areal_density of exposure 5 is not a number in row 2, column 3 "
    with pytest.raises(FileFormatError, match=words) as said:
        read_maps(path)
    assert "no flag says why; the maps file is damaged" in str(said.value)
    assert read_maps(path, which=[0, 2]).exposure.tolist() == [4, 9]


def test_files_that_are_no_maps(maps: Maps, tmp_path: Path) -> None:
    path = tmp_path / "maps.h5"
    write_maps(maps, path)
    with h5py.File(path, "r+") as file:
        deviance = file["entry/maps/deviance"][:, :4]
        del file["entry/maps/deviance"]
    with pytest.raises(FileFormatError, match="deviance is missing"):
        read_maps(path)
    with h5py.File(path, "r+") as file:
        file["entry/maps/deviance"] = deviance
    with pytest.raises(FileFormatError, match=r"deviance has shape .* damaged"):
        read_maps(path)
    with h5py.File(path, "r+") as file:
        del file["entry/maps/areal_density"]
    with pytest.raises(FileFormatError, match="so these are no maps"):
        read_maps(path)
