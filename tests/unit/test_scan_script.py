"""The scan script: images found, defaults filled in, every fault with its line."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np
import pytest
import tifffile

from spectral.errors import InputError, ScanError
from spectral.scans.scan import Filter, Layer
from spectral.scans.scan_file import write_scan
from spectral.scans.script import open_scan, read_script
from spectral.scans.script_writing import script_text, write_script
from spectral.scans.stored_counts import NOT_A_COUNT
from spectral.scans.toml_lines import Lines

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    from spectral.scans.script_exposures import ScriptExposure

HEAD = """\
title = "made for a test"
start_time = "2026-01-05T08:00:00+00:00"

[source]
voltage_kv = 80
target_material = "W"
filters = [{ material = "Al", thickness_mm = 2.0 }]

[detector]
thresholds_kev = [20, 35.5]
sensor_material = "CdTe"
sensor_thickness_mm = 1.0
pixel_size_um = [100, 110]

[[material]]
name = "PE"
formula = "C2H4"
density_g_cm3 = 0.94

[[material]]
name = "Al"
formula = "Al"
density_g_cm3 = 2.7

[defaults]
count_time_s = 0.5
current_ma = 2.0
files = "images/{exposure:02d}_{threshold}.tif"

"""
EXPOSURES = """\
[[exposure]]
role = "dark"

[[exposure]]
step = "open"
role = "open"
repeats = 2

[[exposure]]
step = "PE 5, Al 0.5"
role = "wedge"
layers_mm = { PE = 5, Al = 0.5 }
current_ma = 3.0

[[exposure]]
role = "object"
rotation_angle_deg = 15
"""
SHAPE = (5, 2, 4, 6)


def counts_of(shape: tuple[int, ...] = SHAPE) -> NDArray[np.uint16]:
    counts = np.arange(np.prod(shape)).reshape(shape) % 3000
    return counts.astype(np.uint16)


def written(
    folder: Path, text: str = HEAD + EXPOSURES, counts: NDArray[Any] | None = None
) -> Path:
    """A script with one TIFF file an exposure and threshold."""
    (folder / "images").mkdir(exist_ok=True)
    counts = counts_of() if counts is None else counts
    for i, exposure in enumerate(counts, start=1):
        for k, image in enumerate(exposure, start=1):
            tifffile.imwrite(folder / f"images/{i:02d}_{k}.tif", image)
    path = folder / "scan.toml"
    path.write_text(text)
    return path


def test_one_file_an_exposure_and_threshold(tmp_path: Path) -> None:
    scan = open_scan(written(tmp_path))
    assert scan.shape == SHAPE
    assert np.array_equal(scan.counts.read([4, 0, 2]), counts_of()[[4, 0, 2]])
    assert scan.counts.read([0]).dtype == np.uint32
    assert scan.role == ("dark", "open", "open", "wedge", "object")
    assert scan.thickness_mm[:4].tolist() == [[0, 0], [0, 0], [0, 0], [5, 0.5]]
    assert np.isnan(scan.thickness_mm[4]).all()
    assert scan.count_time_s.tolist() == [0.5] * 5
    assert scan.current_ma is not None
    assert scan.current_ma.tolist() == [0, 2, 2, 3, 2]
    assert scan.thresholds_kev.tolist() == [20, 35.5]
    assert scan.voltage_kv == 80
    assert scan.filters == (Filter(material="Al", thickness_mm=2.0),)
    assert scan.materials[0] == Layer(name="PE", formula="C2H4", density_g_cm3=0.94)
    assert scan.sensor_material == "CdTe"
    assert scan.sensor_thickness_mm == 1.0
    assert scan.pixel_size_um == (100.0, 110.0)
    assert scan.count_limit == 65535
    assert scan.title == "made for a test"
    assert scan.rotation_angle_deg is None
    assert len(scan.digest) == 64
    assert scan.notes == ()


def test_the_digest_follows_the_images(tmp_path: Path) -> None:
    path = written(tmp_path)
    before = open_scan(path).digest
    assert open_scan(path).digest == before
    tifffile.imwrite(tmp_path / "images/03_1.tif", counts_of()[0, 0])
    assert open_scan(path).digest != before


def test_a_scan_file_and_a_script_open_alike(tmp_path: Path) -> None:
    scan = open_scan(written(tmp_path))
    write_scan(scan, tmp_path / "scan.h5")
    stored = open_scan(tmp_path / "scan.h5")
    assert np.array_equal(stored.counts.read(range(5)), scan.counts.read(range(5)))
    assert stored.materials == scan.materials
    with pytest.raises(InputError, match="is a folder; name a scan file"):
        open_scan(tmp_path)


def stack(tmp_path: Path, pattern: str, extra: str = "") -> Path:
    text = (HEAD + EXPOSURES).replace("images/{exposure:02d}_{threshold}.tif", pattern)
    path = tmp_path / "scan.toml"
    path.write_text(text.replace("current_ma = 2.0\n", f"current_ma = 2.0\n{extra}"))
    return path


def test_a_stack_for_each_exposure(tmp_path: Path) -> None:
    for i, images in enumerate(counts_of()):
        tifffile.imwrite(tmp_path / f"n{i + 1}.tif", images, photometric="minisblack")
    scan = open_scan(stack(tmp_path, "n{exposure}.tif"))
    assert np.array_equal(scan.counts.read(range(5)), counts_of())


def test_a_stack_for_each_threshold(tmp_path: Path) -> None:
    for k, kev in enumerate(("20", "35.5")):
        tifffile.imwrite(
            tmp_path / f"above{kev}.tif",
            counts_of()[:, k],
            photometric="minisblack",
            imagej=k == 1,
        )
    scan = open_scan(stack(tmp_path, "above{threshold_kev:g}.tif"))
    assert np.array_equal(scan.counts.read(range(5)), counts_of())


@pytest.mark.parametrize("lead", [(10,), (5, 2), (2, 5)])
def test_one_dataset_for_all(tmp_path: Path, lead: tuple[int, ...]) -> None:
    counts = counts_of()
    extra = 'dataset = "/run/all"\n'
    if lead == (2, 5):
        counts = counts.swapaxes(0, 1)
        extra += 'pages = ["threshold", "exposure", "frame"]\n'
    with h5py.File(tmp_path / "run.h5", "w") as file:
        file["run/all"] = counts.reshape(*lead, 4, 6).astype(np.int64)
    scan = open_scan(stack(tmp_path, "run.h5", extra))
    assert np.array_equal(scan.counts.read(range(5)), counts_of())
    assert scan.count_limit == NOT_A_COUNT


def test_a_dataset_for_each_image(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "run.h5", "w") as file:
        for i, k in np.ndindex(5, 2):
            file[f"e{i + 1}/t{k + 1}"] = counts_of()[i, k]
    extra = 'dataset = "e{exposure}/t{threshold}"\n'
    scan = open_scan(stack(tmp_path, "run.h5", extra))
    assert np.array_equal(scan.counts.read([3, 1]), counts_of()[[3, 1]])


def test_frames_are_added_up(tmp_path: Path) -> None:
    frames = counts_of((5, 2, 3, 4, 6))
    frames[1, 0, 2, 0, 0] = 65535
    for i, k in np.ndindex(5, 2):
        tifffile.imwrite(
            tmp_path / f"{i + 1}_{k + 1}.tif", frames[i, k], photometric="minisblack"
        )
    scan = open_scan(stack(tmp_path, "{exposure}_{threshold}.tif", "frames = 3\n"))
    assert scan.count_time_s.tolist() == [1.5] * 5
    got = scan.counts.read(range(5))
    assert got[1, 0, 0, 0] == scan.count_limit == NOT_A_COUNT - 1
    wanted = frames.sum(2, dtype=np.int64)
    assert np.count_nonzero(got != wanted) == 1


def test_a_mask_image(tmp_path: Path) -> None:
    mask = np.eye(4, 6, dtype=np.uint16)
    tifffile.imwrite(tmp_path / "mask.tif", mask)
    text = (HEAD + EXPOSURES).replace(
        "sensor_material", 'pixel_mask = "mask.tif"\nsensor_material'
    )
    path = written(tmp_path, text)
    assert np.array_equal(open_scan(path).pixel_mask, mask)
    tifffile.imwrite(tmp_path / "mask.tif", mask[:3])
    with pytest.raises(ScanError, match=r"must be one image of integers of shape"):
        open_scan(path)


def test_a_template_needs_no_images(tmp_path: Path) -> None:
    path = tmp_path / "scan.toml"
    path.write_text(
        HEAD.replace("[[material]]", "rows = 3\ncolumns = 7\n\n[[material]]", 1)
        + EXPOSURES
        + '\n[virtual]\nseed = 3\ndetector = "some.toml"\n'
    )
    script = read_script(path)
    scan = script.template()
    assert scan.shape == (5, 2, 3, 7)
    assert not scan.counts.read([0, 4]).any()
    assert scan.role[3] == "wedge"
    assert script.virtual == {"seed": 3, "detector": "some.toml"}
    with pytest.raises(ScanError, match=r"line 33: there is no image .*01_1\.tif"):
        script.scan()


def test_tables_of_another_file(tmp_path: Path) -> None:
    (tmp_path / "parts").mkdir()
    head, _, tail = HEAD.partition("[detector]")
    detector, _, rest = tail.partition("[[material]]")
    materials, _, defaults = rest.partition("[defaults]")
    (tmp_path / "parts/detector.toml").write_text(
        f"[detector]{detector}rows = 4\ncolumns = 6\n[[material]]{materials}"
    )
    use = 'use = "parts/detector.toml"\n'
    text = (
        f"{head}[detector]\n{use}thresholds_kev = [25, 40]\n"
        f"[[material]]\n{use}\n[defaults]{defaults}{EXPOSURES}"
    )
    scan = open_scan(written(tmp_path, text))
    assert scan.thresholds_kev.tolist() == [25, 40]
    assert scan.pixel_size_um == (100.0, 110.0)
    assert [m.name for m in scan.materials] == ["PE", "Al"]


def test_a_simulators_description_serves_as_detector(tmp_path: Path) -> None:
    (tmp_path / "described.toml").write_text(
        "[sensor]\nmaterial = 'GaAs'\nthickness_um = 500\npitch_um = 80\n"
        "[electronics]\nthresholds_kev = [15, 28, 42]\n"
    )
    head, _, tail = HEAD.partition("[detector]")
    rest = tail.partition("[[material]]")[2]
    text = (
        f'{head}[detector]\nuse = "described.toml"\nrows = 3\ncolumns = 2\n'
        f"[[material]]{rest}{EXPOSURES}"
    )
    path = tmp_path / "scan.toml"
    path.write_text(text)
    scan = read_script(path).template()
    assert scan.shape == (5, 3, 3, 2)
    assert scan.sensor_material == "GaAs"
    assert scan.sensor_thickness_mm == 0.5
    assert scan.pixel_size_um == (80.0, 80.0)
    (tmp_path / "described.toml").write_text("name = 'nothing'")
    with pytest.raises(ScanError, match=r"line 10: .*described.toml describes no det"):
        read_script(path)


def test_a_script_written_out_reads_the_same(tmp_path: Path) -> None:
    (tmp_path / "m.tif").touch()
    extra = "rows = 4\ncolumns = 6\npixel_mask = 'm.tif'\n"
    text = HEAD.replace("sensor_material", f"{extra}sensor_material")
    text = text.replace("current_ma", "frames = 3\ncurrent_ma")
    path = tmp_path / "scan.toml"
    path.write_text(text + EXPOSURES)
    script = read_script(path)
    write_script(script, tmp_path / "again.toml")
    again = read_script(tmp_path / "again.toml")

    def plain(exposure: ScriptExposure) -> str:
        # repeats are written out one by one, so they lose their number and name
        named = "" if exposure.repeat > 1 else exposure.step
        return str(replace(exposure, line=0, repeat=1, step=named))

    assert [*map(plain, again.exposures)] == [*map(plain, script.exposures)]
    for name in ("materials", "filters", "pixels", "pixel_size_um", "voltage_kv"):
        assert getattr(again, name) == getattr(script, name)
    assert again.thresholds_kev.tolist() == script.thresholds_kev.tolist()
    assert again.mask_file == script.mask_file


def test_a_planned_script_waits_for_its_files(tmp_path: Path) -> None:
    path = tmp_path / "scan.toml"
    path.write_text(re.sub(r"files = .*\n", "", HEAD) + EXPOSURES)
    text = script_text(read_script(path))
    assert "# files = " in text
    path.write_text(text.replace("# files", "files"))
    assert all("images/" in e.files for e in read_script(path).exposures)


def line_of(text: str, words: str) -> int:
    return text[: text.index(words)].count("\n") + 1


SPOILT = [
    ("voltage_kv = 80", "", "[source]", r"[source] needs voltage_kv"),
    ("voltage_kv = 80", "voltage_kv = -1", "voltage_kv", "must be a number above zero"),
    ("voltage_kv = 80", 'voltage_kv = "80"', "voltage_kv", "must be a number above"),
    ("voltage_kv", "voltage_kV", "voltage_kV", "is 'voltage_kv' meant?"),
    ("files =", "images =", "images", "is 'files' meant?"),
    ("files =", "image =", "image", "is 'files' meant?"),
    ("start_time =", "weather =", "weather", "'weather' is not known here; known are"),
    ('title = "made for a test"', "title = 3", "title", "title must be text in quotes"),
    ("[20, 35.5]", "[35, 20]", "thresholds_kev", "must rise one by one"),
    ("[20, 35.5]", "[20, 20]", "thresholds_kev", "must rise one by one"),
    ("[20, 35.5]", "20", "thresholds_kev", "must be a list of numbers"),
    ("[100, 110]", "[100]", "pixel_size_um", "two numbers: row pitch, column pitch"),
    ('"Al"\nformula', '"PE"\nformula', '"PE"\nformula = "Al"', "'PE' is listed twice"),
    ("current_ma = 2.0", "frames = 0", "frames", "a whole number from 1 on"),
    ('role = "dark"', 'role = "flat"', 'role = "flat"', "role is 'flat'; it must be"),
    ('role = "dark"', "", "[[exposure]]", "[exposure] needs role"),
    (
        "layers_mm = { PE = 5, Al = 0.5 }",
        "",
        '[[exposure]]\nstep = "PE',
        "needs layers",
    ),
    ("{ PE = 5, Al = 0.5 }", "{ Pe = 5 }", "layers_mm", "names 'Pe', which is no"),
    ("{ PE = 5, Al = 0.5 }", "{ PE = -5 }", "layers_mm", "must be zero or more"),
    ("{ PE = 5, Al = 0.5 }", "5", "layers_mm", "must be a table"),
    ("repeats = 2", "layers_mm = { PE = 1 }", "layers_mm", "nothing in the beam, but"),
    ('"PE 5, Al 0.5"', '"open"', 'step = "open"\nrole = "wedge"', "named before, on "),
    ("repeats = 2", "number = 1", "number = 1", "number 1 has been listed before"),
    ("{exposure:02d}", "{shot}", "files", "holds {shot}; known are {exposure}"),
    ("{exposure:02d}", "{exposure", "files", "cannot be read"),
    ("{exposure:02d}", "{exposure:q}", "files", "cannot be filled in"),
    ("current_ma = 2.0", 'pages = ["frame"]', "pages", 'pages must list "exposure"'),
    ("= 15", '= "15"', "rotation_angle_deg", "must be a number"),
    ("title", 'source = "tube"\ntitle', "source", "not valid TOML"),
    ("[source]", "[source", "[source", "not valid TOML"),
    ("[[material]]", '[[material]]\nuse = "none.toml"', "use", "there is no file"),
    ("[[material]]", '[[material]]\nuse = "scan.toml"', "use", "cannot use another"),
]


@pytest.mark.parametrize(("old", "new", "at", "sentence"), SPOILT)
def test_faults_of_the_text(
    tmp_path: Path, old: str, new: str, at: str, sentence: str
) -> None:
    text = (HEAD + EXPOSURES).replace(old, new, 1)
    path = tmp_path / "scan.toml"
    path.write_text(text)
    with pytest.raises(ScanError, match=re.escape(sentence)) as caught:
        read_script(path)
    assert "\n" not in str(caught.value)
    if "TOML" not in sentence:
        assert str(caught.value).startswith(f"{path}, line {line_of(text, at)}: ")


def test_a_toml_fault_has_its_line(tmp_path: Path) -> None:
    path = tmp_path / "scan.toml"
    path.write_text(HEAD.replace("voltage_kv = 80", "voltage_kv = = 80"))
    with pytest.raises(ScanError, match=r"scan\.toml, line 5: not valid TOML: "):
        read_script(path)
    path.write_bytes(b"title = '\xff'")
    with pytest.raises(ScanError, match="not a text file in UTF-8"):
        read_script(path)
    with pytest.raises(ScanError, match="no such file"):
        read_script(tmp_path / "none.toml")
    path.write_text(HEAD)
    with pytest.raises(ScanError, match="line 1: the script lists no exposure"):
        read_script(path)
    path.write_text(HEAD + EXPOSURES)
    with pytest.raises(ScanError, match=r"\[detector\] needs rows and columns"):
        read_script(path).template()


def test_a_missing_image_names_the_line(tmp_path: Path) -> None:
    path = written(tmp_path)
    (tmp_path / "images/04_2.tif").unlink()
    line = line_of(HEAD + EXPOSURES, '[[exposure]]\nstep = "PE 5')
    with pytest.raises(ScanError, match=rf"line {line}: there is no image .*04_2\.tif"):
        open_scan(path)


def test_no_files_named(tmp_path: Path) -> None:
    text = re.sub(r"files = .*\n", "", HEAD) + EXPOSURES
    path = written(tmp_path, text)
    with pytest.raises(ScanError, match="line 29: exposure 0 names no image files"):
        open_scan(path)


@pytest.mark.parametrize(
    ("image", "sentence"),
    [
        (np.zeros((4, 5), np.uint16), "has 4 rows and 5 columns, 4 and 6 are needed"),
        (np.zeros((3, 4, 6), np.uint16), "holds 3 images, the script needs 1 from it"),
        (np.zeros((4, 6, 3), np.uint8), "is a colour image"),
        (np.zeros((4, 6), np.complex64), "holds complex64; counts need whole numbers"),
    ],
)
def test_an_image_of_another_shape(
    tmp_path: Path, image: NDArray[Any], sentence: str
) -> None:
    path = written(tmp_path)
    colour = image.shape[-1] == 3
    tifffile.imwrite(
        tmp_path / "images/02_1.tif",
        image,
        photometric="rgb" if colour else "minisblack",
    )
    line = line_of(HEAD + EXPOSURES, '[[exposure]]\nstep = "open"')
    with pytest.raises(ScanError, match=f"line {line}: .*{sentence}"):
        open_scan(path)


def test_an_image_that_is_none(tmp_path: Path) -> None:
    path = written(tmp_path)
    (tmp_path / "images/02_1.tif").write_text("not an image")
    with pytest.raises(ScanError, match=r"line \d+: .*cannot be read as TIFF"):
        open_scan(path)


def test_an_averaged_image(tmp_path: Path) -> None:
    path = written(tmp_path, counts=counts_of() + np.float32(0.5))
    with pytest.raises(ScanError, match=r"line \d+: .*holds fractions"):
        open_scan(path)


def test_an_image_taken_twice(tmp_path: Path) -> None:
    text = (HEAD + EXPOSURES).replace(
        "current_ma = 3.0", 'files = "images/02_{threshold}.tif"'
    )
    path = written(tmp_path, text)
    first = line_of(text, '[[exposure]]\nstep = "open"')
    again = line_of(text, '[[exposure]]\nstep = "PE 5')
    with pytest.raises(
        ScanError,
        match=rf"line {again}: exposure 3 .*takes the image .*02_1\.tif, which is "
        rf"that of exposure 1 \(open\) on line {first}",
    ):
        open_scan(path)


def test_images_that_change_under_way(tmp_path: Path) -> None:
    scan = open_scan(written(tmp_path))
    tifffile.imwrite(tmp_path / "images/02_1.tif", np.zeros((3, 3), np.uint16))
    with pytest.raises(ScanError, match="has changed its shape"):
        scan.counts.read([1])
    (tmp_path / "images/02_1.tif").write_bytes(b"II")
    with pytest.raises(ScanError, match="is damaged or changed"):
        scan.counts.read([1])


def test_lines_of_every_kind_of_value() -> None:
    text = '''\
a = 1 # [not.a.table]
b = [
  [1, 2],
  "]", # [[c]]
]
text = """
[d]
e = 3
"""
[ f . "g h" ]
k.l = { m = "}" }
[[n]]
[n.o]
p = 1
[[n]]
q = \'\'\'
[[n]]\'\'\'
r = 1
'''
    lines = Lines(text)
    for place, line in {
        ("a",): 1,
        ("b",): 2,
        ("text",): 6,
        ("f", "g h"): 10,
        ("f", "g h", "k", "l"): 11,
        ("f", "g h", "k", "l", "m"): 11,
        ("n", 0): 12,
        ("n", 0, "o", "p"): 14,
        ("n", 1): 15,
        ("n", 1, "r"): 18,
        ("none",): 1,
        ("d", "e"): 1,
    }.items():
        assert lines.of(place) == line, place
