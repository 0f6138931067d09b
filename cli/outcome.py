"""How a command ends: what it prints, where, and with which exit code.

0: done. 1: the data do not allow it, said in one sentence on standard error. 2: wrong
use. 130: interrupted from the keyboard, as shells have it. The result goes to standard
output; progress and messages to standard error.
"""

from __future__ import annotations

import functools
import json
import sys
import warnings
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, ParamSpec

import click

from spectral.errors import InputError, QualityWarning, SpectralError

from .kinds import hint

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping

P = ParamSpec("P")

DATA_DO_NOT_ALLOW = 1
WRONG_USE = 2
INTERRUPTED = 130

SAFETY = (
    "This describes measured counts under the assumptions it names; it is no diagnosis "
    "and no decision about a part or a person. Run X-ray equipment by your local "
    "radiation-protection rules."
)

json_option = click.option(
    "--json",
    "as_json",
    is_flag=True,
    help="Print the summary as JSON on standard output.",
)

scan_argument = click.argument(
    "scan_path",
    metavar="SCAN",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
)


class DataError(click.ClickException):
    """The data do not allow it; exit code 1."""

    exit_code = DATA_DO_NOT_ALLOW


class UseError(click.ClickException):
    """The words typed cannot be; exit code 2."""

    exit_code = WRONG_USE


def ends_well(command: Callable[P, None]) -> Callable[P, None]:
    """Turn the library's errors into one sentence and an exit code."""

    @functools.wraps(command)
    def wrapped(*args: P.args, **kwargs: P.kwargs) -> None:
        try:
            with quality_warnings_as_notes():
                command(*args, **kwargs)
        except InputError as error:
            raise UseError(one_line(error)) from error
        except SpectralError as error:
            message = one_line(error)
            instead = hint(message, kwargs)
            raise DataError(f"{message}; {instead}" if instead else message) from error
        except OSError as error:
            where = f"{error.filename}: " if error.filename else ""
            message = f"{where}{error.strerror or error}"
            raise DataError(message) from error
        except MemoryError as error:
            message = "there is not enough memory for this scan"
            raise DataError(message) from error
        except KeyboardInterrupt:
            say("interrupted before the end")
            raise click.exceptions.Exit(INTERRUPTED) from None

    return wrapped


@contextmanager
def goes_on(output: Path) -> Iterator[None]:
    """End an interruption by saying that the same command goes on."""
    try:
        yield
    except KeyboardInterrupt:
        say(
            f"{output}: interrupted; finished blocks are kept, and the same command "
            "goes on from them"
        )
        raise click.exceptions.Exit(INTERRUPTED) from None


def one_line(error: BaseException) -> str:
    """Return the message of an error, without line breaks."""
    return " ".join(str(error).split())


@contextmanager
def quality_warnings_as_notes() -> Iterator[None]:
    """Show the library's warnings as one line each on standard error."""
    with warnings.catch_warnings():
        warnings.simplefilter("always", QualityWarning)
        usual = warnings.showwarning

        def show_note(
            message: Warning | str, category: type[Warning], *args: Any, **kw: Any
        ) -> None:
            if issubclass(category, QualityWarning):
                say(f"note: {message}")
            else:
                usual(message, category, *args, **kw)

        warnings.showwarning = show_note
        yield


def say(message: str) -> None:
    """Put a message on standard error."""
    click.echo(message, err=True)


def show(summary: Mapping[str, Any], text: str, *, as_json: bool) -> None:
    """Put the result on standard output, for people or for machines."""
    if as_json:
        click.echo(json.dumps(summary, indent=2, allow_nan=False, ensure_ascii=False))
    else:
        click.echo(text)


@contextmanager
def progress(label: str) -> Iterator[Callable[[int, int], None]]:
    """Give a callback for (done, total), shown on one line of a terminal.

    Where standard error is no terminal nothing is shown.
    """
    shown = sys.stderr.isatty()

    def tell(done: int, total: int) -> None:
        if shown:
            click.echo(f"\r{label}: {done} of {total} ", err=True, nl=False)

    try:
        yield tell
    finally:
        if shown:
            click.echo("\r\x1b[K", err=True, nl=False)
