"""A series of exposures is decomposed in blocks, for one job and one run at a time."""

from __future__ import annotations

import errno
import json
import os
import time
from dataclasses import replace
from importlib import import_module
from importlib.metadata import entry_points
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np
import pytest
import tifffile
from click.testing import CliRunner

from spectral.decomposition import series
from spectral.decomposition.block_maps import FIELDS
from spectral.decomposition.decomposer import MaterialDecomposer
from spectral.decomposition.series import decompose_series, split
from spectral.errors import InputError, ScanError
from spectral.scans import maps_parts
from spectral.scans.maps_file import read_maps
from spectral.scans.scan_file import file_digest
from spectral.scans.script import open_scan

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from spectral.scans.scan import Scan

pytestmark = [pytest.mark.end_to_end, pytest.mark.usefixtures("small_blocks")]

OBJECTS = 9
BLOCK = 2
BLOCKS = 5


def leftovers(path: Path) -> list[str]:
    return sorted(p.name for p in path.parent.iterdir() if p != path)


def command(folder: Path, output: Path, *more: str) -> list[str]:
    return [
        "decompose",
        str(folder / "calibration.h5"),
        str(folder / "scan.h5"),
        "-o",
        str(output),
        *more,
    ]


def raise_at(share: float, error: BaseException) -> Callable[[float], None]:
    def tell(done: float) -> None:
        if done >= share:
            raise error

    return tell


def test_blocks_give_the_maps_of_single_exposures(
    decomposer: MaterialDecomposer, scan: Scan, tmp_path: Path
) -> None:
    told: list[float] = []
    written: list[float] = []
    run = decompose_series(
        decomposer,
        scan,
        tmp_path / "m.h5",
        progress=told.append,
        gathering=written.append,
    )
    assert written == pytest.approx([i / BLOCKS for i in range(1, BLOCKS + 1)])
    assert (run.exposures, run.blocks, run.resumed) == (OBJECTS, BLOCKS, 0)
    assert told == pytest.approx([i / BLOCKS for i in range(BLOCKS + 1)])
    whole = decomposer.decompose(scan)
    stored = read_maps(tmp_path / "m.h5")
    for name in ("exposure", *FIELDS):
        np.testing.assert_array_equal(getattr(stored, name), getattr(whole, name))
    assert leftovers(tmp_path / "m.h5") == []
    assert (stored.flags == 0).mean() > 0.9


def test_blocks_of_another_size_give_the_same_maps(
    decomposer: MaterialDecomposer,
    scan: Scan,
    undisturbed: str,
    folder: Path,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(series, "MOST_EXPOSURES", 64)
    run = decompose_series(decomposer, scan, tmp_path / "m.h5")
    assert run.blocks == 1
    assert undisturbed
    one, other = read_maps(folder / "undisturbed.h5"), read_maps(tmp_path / "m.h5")
    for name in ("exposure", *FIELDS):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))


def test_blocks_are_read_one_ahead_and_no_more(
    decomposer: MaterialDecomposer,
    scan: Scan,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    events: list[str] = []

    class Watched:
        shape = scan.shape

        def read(self, exposures: Any) -> Any:
            events.append("read")
            return scan.counts.read(exposures)

    decomposer.fit(scan)
    solve = decomposer.maps_of

    def solved(*arguments: Any) -> Any:
        events.append("solve")
        maps = solve(*arguments)
        time.sleep(0.05)  # time for a reader that ran too far
        return maps

    monkeypatch.setattr(decomposer, "maps_of", solved)
    monkeypatch.setattr(decomposer, "fit", lambda _: events.clear())
    decompose_series(decomposer, replace(scan, counts=Watched()), tmp_path / "m.h5")
    assert events.count("read") == events.count("solve") == BLOCKS
    for i, event in enumerate(events):
        ahead = events[: i + 1].count("read") - events[: i + 1].count("solve")
        assert 0 <= ahead <= 2, (i, event)


def test_block_sizes_follow_from_the_scan_alone(scan: Scan) -> None:
    class Large:
        shape = (4000, 6, 512, 512)

        def read(self, exposures: Any) -> Any:
            raise NotImplementedError

    n = Large.shape[0]
    large = replace(
        scan,
        counts=Large(),
        role=("object",) * n,
        thresholds_kev=np.arange(6.0),
        thickness_mm=np.zeros((n, 2)),
        count_time_s=np.ones(n),
        current_ma=np.ones(n),
        pixel_mask=np.zeros((512, 512), np.uint32),
    )
    blocks = split(large, np.arange(n), 2)
    assert [e for block in blocks for e in block] == list(range(n))
    size = len(blocks[0]) * 512 * 512 * (6 * 4 + 42)
    assert size <= series.BLOCK_BYTES


def test_whole_chunks_fit_into_blocks() -> None:
    assert [maps_parts.exposures_at_once(n) for n in (0, 1, 7, 16, 17, 50, 64)] == [
        1, 1, 7, 16, 16, 48, 64,
    ]  # fmt: skip


def test_single_exposure_and_single_pixel_open_without_the_rest(
    undisturbed: str, folder: Path
) -> None:
    assert undisturbed
    with h5py.File(folder / "undisturbed.h5") as file:
        for name in FIELDS:
            dataset = file["entry/maps"][name]
            assert dataset.compression == "gzip", name
            assert dataset.shuffle, name
            assert dataset.chunks[0] == BLOCK, name
            assert all(n == 1 for n in dataset.chunks[1:-2]), name
            assert max(dataset.chunks[-2:]) <= 64, name


def test_chosen_exposures_in_their_order(
    decomposer: MaterialDecomposer, scan: Scan, tmp_path: Path
) -> None:
    decompose_series(decomposer, scan, tmp_path / "m.h5", exposures=[7, 1, 4])
    found = read_maps(tmp_path / "m.h5")
    assert found.exposure.tolist() == [7, 1, 4]
    alone = decomposer.decompose(scan, exposures=[4])
    np.testing.assert_array_equal(found.areal_density[2], alone.areal_density[0])
    with pytest.raises(InputError, match="exposures 0 to 13 exist, asked for 99"):
        decompose_series(decomposer, scan, tmp_path / "x.h5", exposures=[99])
    with pytest.raises(InputError, match="exposure 0 is dark: it shows no object"):
        decompose_series(decomposer, scan, tmp_path / "x.h5", exposures=[5, 0])


SCRIPT = """
[source]
voltage_kv = {voltage}
filters = [{{ material = "Al", thickness_mm = 2.0 }}]

[detector]
thresholds_kev = {thresholds}

[[material]]
name = "PMMA"
formula = "C5H8O2"
density_g_cm3 = 1.19

[[material]]
name = "Al"
formula = "Al"
density_g_cm3 = 2.7

[defaults]
count_time_s = 0.1
current_ma = 3.0
files = "above_{{threshold}}.tif"

[[exposure]]
role = "dark"

[[exposure]]
role = "open"
repeats = 2

[[exposure]]
role = "object"
repeats = {objects}

[[exposure]]
role = "open"
repeats = 2
"""


def test_stacks_of_images_are_streamed_too(
    decomposer: MaterialDecomposer, scan: Scan, undisturbed: str, folder: Path,
    tmp_path: Path,
) -> None:  # fmt: skip
    assert undisturbed
    counts = scan.counts.read(np.arange(scan.shape[0]))
    for k in range(scan.shape[1]):
        stack = np.ascontiguousarray(counts[:, k])
        tifffile.imwrite(
            tmp_path / f"above_{k + 1}.tif", stack, photometric="minisblack"
        )
    path = tmp_path / "scan.toml"
    path.write_text(
        SCRIPT.format(
            voltage=scan.voltage_kv,
            thresholds=scan.thresholds_kev.tolist(),
            objects=OBJECTS,
        )
    )
    images = open_scan(path)
    assert images.role == scan.role
    fresh = MaterialDecomposer(decomposer.calibration)
    run = decompose_series(fresh, images, tmp_path / "m.h5")
    assert run.blocks == BLOCKS
    one, other = read_maps(folder / "undisturbed.h5"), read_maps(tmp_path / "m.h5")
    for name in FIELDS:
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))


def test_two_runs_on_one_output_refuse_each_other(
    decomposer: MaterialDecomposer, scan: Scan, undisturbed: str, tmp_path: Path
) -> None:
    output = tmp_path / "m.h5"

    def second_run(done: float) -> None:
        if 0.0 < done < 1.0:
            with pytest.raises(ScanError, match="another run is writing this output"):
                decompose_series(decomposer, scan, output)

    decompose_series(decomposer, scan, output, progress=second_run)
    assert file_digest(output) == undisturbed


def changed(what: str, decomposer: MaterialDecomposer, scan: Scan) -> dict[str, Any]:
    """Arguments of a run that differs in one thing."""
    calibration = decomposer.calibration
    made = {"decomposer": decomposer, "scan": scan}
    if what == "options":
        made["decomposer"] = MaterialDecomposer(calibration, nonnegative=True)
    elif what == "calibration":
        made["decomposer"] = MaterialDecomposer(replace(calibration, digest="1" * 64))
    elif what == "scan":
        made["scan"] = replace(scan, digest="2" * 64)
    else:
        made["exposures"] = [3, 4]
    return made


@pytest.mark.parametrize("what", ["options", "calibration", "scan", "exposures"])
def test_blocks_of_another_job_are_refused(
    what: str,
    decomposer: MaterialDecomposer,
    scan: Scan,
    undisturbed: str,
    tmp_path: Path,
) -> None:
    output = tmp_path / "m.h5"
    with pytest.raises(KeyboardInterrupt):
        decompose_series(
            decomposer, scan, output, progress=raise_at(0.6, KeyboardInterrupt())
        )
    sentence = rf"unfinished maps of another job lie in .*unfinished \(other {what}\)"
    with pytest.raises(ScanError, match=sentence):
        decompose_series(**changed(what, decomposer, scan), path=output)
    run = decompose_series(decomposer, scan, output)
    assert run.resumed == 3
    assert file_digest(output) == undisturbed


def test_counts_that_were_never_stored_are_known_by_themselves(
    decomposer: MaterialDecomposer, scan: Scan, tmp_path: Path
) -> None:
    counts = scan.counts.read(np.arange(scan.shape[0]))
    one = replace(scan.with_counts(counts), source="memory")
    with pytest.raises(KeyboardInterrupt):
        decompose_series(
            decomposer, one, tmp_path / "m.h5",
            progress=raise_at(0.6, KeyboardInterrupt()),
        )  # fmt: skip
    changed_counts = counts.copy()
    changed_counts[5, :, 2, 2] += 1
    other = replace(scan.with_counts(changed_counts), source="memory")
    with pytest.raises(ScanError, match=r"\(other scan\)"):
        decompose_series(decomposer, other, tmp_path / "m.h5")
    assert decompose_series(decomposer, one, tmp_path / "m.h5").resumed == 3


def invoke(*words: str) -> Any:
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    return CliRunner().invoke(script.load(), list(words))


def test_command_says_what_it_went_on_from(
    decomposer: MaterialDecomposer, scan: Scan, undisturbed: str, folder: Path,
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    output = tmp_path / "m.h5"
    with pytest.raises(KeyboardInterrupt):
        decompose_series(
            decomposer, scan, output, progress=raise_at(0.6, KeyboardInterrupt())
        )
    refused = invoke(*command(folder, output, "--nonnegative"))
    assert refused.exit_code == 1
    assert "unfinished maps of another job" in refused.stderr
    with monkeypatch.context() as patch:
        error = OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        patch.setattr(np, "savez", lambda *_, **__: (_ for _ in ()).throw(error))
        full = invoke(*command(folder, output))
    assert full.exit_code == 1
    assert full.stderr.splitlines()[:2] == ["prepare", "decompose"]
    assert len(full.stderr.splitlines()) == 3
    assert "then the same command goes on from them" in full.stderr
    done = invoke(*command(folder, output, "--json"))
    assert done.exit_code == 0
    assert "went on from 3 of 5 blocks of an earlier run" in done.stderr
    assert json.loads(done.stdout)
    assert file_digest(output) == undisturbed


def test_command_does_not_write_over_what_it_reads(folder: Path) -> None:
    before = file_digest(folder / "scan.h5")
    refused = invoke(*command(folder, folder / "scan.h5"))
    assert refused.exit_code == 2
    assert "is read by this command; name another output" in refused.stderr
    assert file_digest(folder / "scan.h5") == before


def stages_module() -> Any:
    invoke("--help")
    (script,) = entry_points(group="console_scripts", name="wedgewright")
    package = type(script.load()).__module__.rpartition(".")[0]
    return import_module(f"{package}.stages")


def test_progress_tells_rate_and_remaining_time() -> None:
    stage = stages_module().Stage("decompose", 100.0, 0.2, 1000, "exposures", 0.0)
    assert stage.line(0.3, 102.0) == "decompose:  30 %"
    # a tenth of 1000 exposures in 20 s; seven tenths are left
    assert stage.line(0.3, 120.0) == "decompose:  30 %, 5 exposures/s, 2 min left"
    assert stage.line(0.3, 1100.0) == "decompose:  30 %, 6 exposures/min, 1.9 h left"
    assert stage.line(0.9, 170.0) == "decompose:  90 %, 10 exposures/s, 10 s left"
    assert stage.line(0.2, 999.0) == "decompose:  20 %"
    assert stage.line(1.0, 999.0) == "decompose: 100 %"


def test_long_stage_is_told_every_minute_without_a_terminal(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    module = stages_module()
    clock = [0.0]
    monkeypatch.setattr(module.time, "monotonic", lambda: clock[0])
    with module.stages(work=(100, "exposures")) as tell:
        for done in range(11):
            clock[0] = 20.0 * done
            tell("work", done / 100)
    lines = capsys.readouterr().err.splitlines()
    assert lines[0] == "work"
    assert len(lines) == 4
    assert lines[1] == "work:   3 %, 3 exposures/min, 32 min left"
