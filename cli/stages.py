"""Progress of work that goes through named stages."""

from __future__ import annotations

import sys
import time
from contextlib import contextmanager
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

REFRESH_S = 0.1


@contextmanager
def stages() -> Iterator[Callable[[str, float], None]]:
    """Give a callback for (stage, finished share), shown on one line of a terminal.

    Where standard error is no terminal, each stage is named once.
    """
    shown = sys.stderr.isatty()
    last = ("", 0.0)

    def tell(stage: str, share: float) -> None:
        nonlocal last
        now = time.monotonic()
        if not shown:
            if stage != last[0]:
                click.echo(stage, err=True)
                last = (stage, now)
            return
        if stage == last[0] and share < 1.0 and now - last[1] < REFRESH_S:
            return
        last = (stage, now)
        click.echo(f"\r\x1b[K{stage}: {100 * share:3.0f} %", err=True, nl=False)

    try:
        yield tell
    finally:
        if shown:
            click.echo("\r\x1b[K", err=True, nl=False)
