"""What is installed: every folder of code is listed, and nothing else comes along."""

from __future__ import annotations

import ast
import importlib.metadata
import subprocess
import sys
import tomllib
from pathlib import Path

import spectral

ROOT = Path(__file__).resolve().parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
SETUPTOOLS = PROJECT["tool"]["setuptools"]


def test_every_package_is_listed() -> None:
    found = set()
    for name, folder in SETUPTOOLS["package-dir"].items():
        for init in (ROOT / folder).rglob("__init__.py"):
            inner = init.parent.relative_to(ROOT / folder).parts
            found.add(".".join((name, *inner)))
    assert found == set(SETUPTOOLS["packages"])


def test_every_folder_of_code_is_a_package() -> None:
    for folder in SETUPTOOLS["package-dir"].values():
        for module in (ROOT / folder).rglob("*.py"):
            assert (module.parent / "__init__.py").is_file(), module


def test_types_are_shipped() -> None:
    for name, folder in SETUPTOOLS["package-dir"].items():
        assert "py.typed" in SETUPTOOLS["package-data"][name]
        assert (ROOT / folder / "py.typed").is_file()


def test_the_version_is_that_of_the_distribution() -> None:
    assert spectral.__version__ == importlib.metadata.version("wedgewright")
    assert spectral.__version__ == PROJECT["project"]["version"]


def test_the_folder_name_of_the_command_is_no_import_name() -> None:
    tried = subprocess.run(
        [sys.executable, "-c", "import cli"],
        cwd="/",
        capture_output=True,
        text=True,
        check=False,
    )
    assert "ModuleNotFoundError" in tried.stderr


def test_what_is_imported_is_required() -> None:
    """Each package that the code imports is a declared dependency."""
    declared = {
        requirement.split(">=")[0].split("[")[0].strip().replace("-", "_").lower()
        for requirement in (
            *PROJECT["project"]["dependencies"],
            *PROJECT["project"]["optional-dependencies"]["spekpy"],
        )
    }
    own_name = {"PIL": "pillow", "llvmlite": "numba", "sklearn": "scikit_learn"}
    ours = {"spectral", "spectral_cli"}
    for folder in SETUPTOOLS["package-dir"].values():
        for path in (ROOT / folder).rglob("*.py"):
            for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
                heads: set[str] = set()
                if isinstance(node, ast.Import):
                    heads = {alias.name.split(".")[0] for alias in node.names}
                elif isinstance(node, ast.ImportFrom) and node.level == 0:
                    heads = {str(node.module).split(".")[0]}
                for head in heads - ours - set(sys.stdlib_module_names):
                    assert own_name.get(head, head).lower() in declared, (path, head)
