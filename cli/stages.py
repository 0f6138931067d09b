"""Progress of work that goes through named stages."""

from __future__ import annotations

import sys
import time
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

REFRESH_S = 0.1
LONG_S = 5.0
"""From when on a stage's rate and remaining time are told."""
LINE_EVERY_S = 60.0
"""How often a stage is told where standard error is no terminal."""


@dataclass(slots=True)
class Stage:
    """A stage at work: where it began, and what it counts.

    Attributes
    ----------
    name : str
    began_s, began_share : float
        Clock and finished share when it was first told of: what an earlier run had
        done takes no part in the rate.
    count, unit : int, str
        What the whole stage consists of; 0 if it is nothing to be counted.
    told_s : float
        When it was last shown.
    """

    name: str = ""
    began_s: float = 0.0
    began_share: float = 0.0
    count: int = 0
    unit: str = ""
    told_s: float = 0.0

    def line(self, share: float, now_s: float) -> str:
        """Finished share and, of a long stage, its rate and remaining time."""
        text = f"{self.name}: {100 * share:3.0f} %"
        past = now_s - self.began_s
        done = share - self.began_share
        if past < LONG_S or done <= 0.0 or share >= 1.0:
            return text
        if self.count:
            text += f", {rate_text(self.count * done / past, self.unit)}"
        return f"{text}, {time_text((1.0 - share) * past / done)} left"


@contextmanager
def stages(**counted: tuple[int, str]) -> Iterator[Callable[[str, float], None]]:
    """Give a callback for (stage, finished share), shown on one line of a terminal.

    Where standard error is no terminal, a stage is named once and, if it is long, told
    again every minute.

    Parameters
    ----------
    **counted : (int, str)
        By stage: what the whole of it consists of, as (3600, "exposures").
    """
    shown = sys.stderr.isatty()
    at = Stage()

    def tell(name: str, share: float) -> None:
        nonlocal at
        now = time.monotonic()
        new = name != at.name
        if new:
            at = Stage(name, now, share, *counted.get(name, (0, "")), now)
        if not shown:
            if new:
                click.echo(name, err=True)
            elif now - at.told_s >= LINE_EVERY_S:
                at.told_s = now
                click.echo(at.line(share, now), err=True)
            return
        if new or share >= 1.0 or now - at.told_s >= REFRESH_S:
            at.told_s = now
            click.echo(f"\r\x1b[K{at.line(share, now)}", err=True, nl=False)

    try:
        yield tell
    finally:
        if shown:
            click.echo("\r\x1b[K", err=True, nl=False)


def rate_text(per_second: float, unit: str) -> str:
    """A rate, by the minute if it is slow."""
    if per_second >= 1.0:
        return f"{per_second:.3g} {unit}/s"
    return f"{60.0 * per_second:.2g} {unit}/min"


def time_text(seconds: float) -> str:
    """A time to wait, as exact as such a thing can be known."""
    if seconds < 90.0:
        return f"{seconds:.0f} s"
    if seconds < 5400.0:
        return f"{seconds / 60.0:.0f} min"
    return f"{seconds / 3600.0:.1f} h"
