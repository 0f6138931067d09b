"""The rooms of the house: what each module may import, and how long it may be."""

from __future__ import annotations

import ast
from graphlib import CycleError, TopologicalSorter
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
LIBRARY = sorted((ROOT / "spectral").rglob("*.py"))
COMMANDS = sorted((ROOT / "cli").rglob("*.py"))
MOST_LINES = 500

#: Packages that belong to some modules only: the folders and files that may use them.
ROOMS: dict[str, tuple[str, ...]] = {
    "numba": ("spectral/kernels/",),
    "h5py": ("spectral/scans/", "spectral/calibration/calibration_file.py"),
    "tifffile": ("spectral/scans/",),
    "matplotlib": ("spectral/reporting/",),
    "xraydb": ("spectral/physics/cross_sections.py",),
    "click": ("cli/",),
}

#: For each folder of the library, the folders it may look at. Data flow one way.
LOOKS_AT: dict[str, set[str]] = {
    "physics": {"kernels"},
    "kernels": set(),
    "forward": {"physics", "kernels", "scans"},
    "scans": set(),
    "calibration": {"forward", "physics", "kernels", "scans"},
    "decomposition": {"calibration", "forward", "physics", "kernels", "scans"},
    "reporting": {"decomposition", "calibration", "forward", "physics", "scans"},
    "demo": {"reporting", "decomposition", "calibration", "forward", "physics"}
    | {"virtual", "scans"},
    "virtual": {
        "physics.cross_sections",
        "physics.materials",
        "physics.tube",
        "kernels",
        "scans",
    },
}
#: Modules at the top of the package, which every one may use.
FOR_ALL = {"errors"}


def place(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


def imported(path: Path) -> set[str]:
    """Every module that a file imports, lazily or for types only too."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
            names |= {f"{node.module}.{alias.name}" for alias in node.names}
    return names


def allowed(inner: str, folder: str) -> bool:
    """Whether a module of one folder may use spectral.<inner>."""
    head = inner.partition(".")[0]
    if head == folder or head in FOR_ALL or head.startswith("__"):
        return True
    return any(
        inner == room or inner.startswith(f"{room}.")
        for room in LOOKS_AT.get(folder, set())
    )


@pytest.mark.parametrize("path", LIBRARY + COMMANDS, ids=place)
def test_packages_stay_in_their_rooms(path: Path) -> None:
    for name in imported(path):
        rooms = ROOMS.get(name.split(".")[0])
        if rooms is not None:
            assert place(path).startswith(rooms), f"{name} is not for {place(path)}"


@pytest.mark.parametrize("path", LIBRARY, ids=place)
def test_data_flow_one_way(path: Path) -> None:
    parts = path.relative_to(ROOT / "spectral").parts
    folder = parts[0] if len(parts) > 1 else ""
    if not folder:
        return
    assert folder in LOOKS_AT, f"say in LOOKS_AT what {folder} may look at"
    for name in imported(path):
        head, _, inner = name.partition(".")
        if head == "spectral" and inner:
            assert allowed(inner, folder), f"{place(path)} looks up at {name}"


def in_a_circle(imports: dict[str, set[str]]) -> list[str]:
    """Modules that import each other in a circle, if only for types."""
    looks_at = {
        module: {
            other
            for name in names
            for other in (name, name.rpartition(".")[0])
            if other in imports
        }
        for module, names in imports.items()
    }
    try:
        TopologicalSorter(looks_at).prepare()
    except CycleError as error:
        return list(error.args[1])
    return []


def test_no_modules_import_each_other_in_a_circle() -> None:
    named = {place(p).removesuffix(".py").replace("/", "."): p for p in LIBRARY}
    assert in_a_circle({name: imported(path) for name, path in named.items()}) == []


def test_a_circle_would_be_found() -> None:
    two = {"spectral.a": {"spectral.b.One"}, "spectral.b": {"spectral.a"}}
    assert set(in_a_circle(two)) == {"spectral.a", "spectral.b"}


@pytest.mark.parametrize("path", LIBRARY, ids=place)
def test_the_library_knows_nothing_of_the_command(path: Path) -> None:
    assert not {n for n in imported(path) if n.split(".")[0] in ("cli", "spectral_cli")}


@pytest.mark.parametrize("path", LIBRARY + COMMANDS, ids=place)
def test_modules_are_short_and_say_what_they_are(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= MOST_LINES
    assert ast.get_docstring(ast.parse(text)), f"{place(path)} needs a docstring"


@pytest.mark.parametrize("path", LIBRARY + COMMANDS, ids=place)
def test_no_module_has_a_name_that_says_nothing(path: Path) -> None:
    assert path.stem not in {"utils", "helpers", "core", "common", "misc"}


@pytest.mark.parametrize("path", LIBRARY, ids=place)
def test_the_library_prints_and_asserts_nothing(path: Path) -> None:
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        assert not isinstance(node, ast.Assert), f"line {node.lineno}: assert"
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            assert node.func.id != "print", f"line {node.lineno}: print"


def test_the_rule_would_catch_a_look_up() -> None:
    assert not allowed("calibration.result", "physics")
    assert not allowed("decomposition.newton", "scans")
    assert not allowed("physics.tube_response", "virtual")
    assert allowed("scans.maps.Maps", "decomposition")
    assert allowed("physics.tube.spectrum", "virtual")
    assert allowed("errors.ScanError", "kernels")
