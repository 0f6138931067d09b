"""Files that a command writes: refused before the work if they cannot be."""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from collections.abc import Iterable


class OutputFile(click.Path):
    """A file to write, in a folder that exists and takes files."""

    def __init__(self) -> None:
        super().__init__(dir_okay=False, writable=True, path_type=Path)

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> Any:
        """Return the path, once its folder has taken a file for a moment."""
        path = Path(str(super().convert(value, param, ctx)))
        folder = path.parent
        if not folder.is_dir():
            self.fail(
                f"{path}: the folder {folder} does not exist; make it, or name another "
                "output",
                param,
                ctx,
            )
        try:
            with tempfile.TemporaryFile(dir=folder):
                pass
        except OSError as error:
            why = error.strerror or error
            self.fail(
                f"{path}: nothing can be written into the folder {folder} ({why}); "
                "name another output",
                param,
                ctx,
            )
        return path


def keep_inputs(outputs: Iterable[Path | None], *inputs: Path | None) -> None:
    """Refuse to write over what the command reads, or one file over another.

    Raises
    ------
    click.UsageError
    """
    seen = {path.resolve() for path in inputs if path is not None}
    for output in outputs:
        if output is None:
            continue
        same = output.exists() and any(
            path is not None and path.exists() and output.samefile(path)
            for path in inputs
        )
        if same:
            msg = f"{output} is read by this command; name another output"
            raise click.UsageError(msg)
        if output.resolve() in seen:
            msg = f"{output} is named for two files; name another output"
            raise click.UsageError(msg)
        seen.add(output.resolve())
