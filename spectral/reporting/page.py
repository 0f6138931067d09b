"""One HTML page that needs nothing from outside, from plain parts."""

from __future__ import annotations

import html
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from spectral.reporting.drawing import Picture
from spectral.reporting.stylesheet import stylesheet

if TYPE_CHECKING:
    from collections.abc import Sequence

_LONG_TABLE = 18
_STEPS = 24
SAFETY = (
    "These are measurements with the stated assumptions. wedgewright is not a medical "
    "device, its results are no diagnosis, and it takes no decision to accept or "
    "reject a part; X-ray equipment is run by trained people under the local "
    "radiation-protection rules."
)


@dataclass(frozen=True, slots=True, kw_only=True)
class KeyFigure:
    """One figure of the answer.

    Attributes
    ----------
    name : str
        What it is.
    text : str
        Value with unit, as a person reads it.
    remark : str
        What it should be, or what it means.
    value : float or None
        For machines.
    """

    name: str
    text: str
    remark: str = ""
    value: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """A table; the first cell of each row names it.

    Attributes
    ----------
    caption : str
    header : sequence of str
    rows : sequence of sequences of str
    words : set of int
        Columns that hold words, and are set flush left; the first always is.
    swatches : sequence of str, optional
        A colour for each row, shown before its name.
    """

    caption: str
    header: Sequence[str]
    rows: Sequence[Sequence[str]]
    words: frozenset[int] = frozenset()
    swatches: Sequence[str] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """A part of the page under one heading."""

    title: str
    parts: Sequence[str | Picture | Table]

    @property
    def anchor(self) -> str:
        """Name of the section in links."""
        letters = (c if c.isalnum() else "-" for c in self.title.lower())
        return "-".join(p for p in "".join(letters).split("-") if p)


@dataclass(frozen=True, slots=True, kw_only=True)
class Page:
    """All that a page says.

    Attributes
    ----------
    kind : str
        "Maps", "Calibration" or "Scan", with what it is of.
    title : str
    said : sequence of str
        The answer in sentences.
    look : sequence of str
        What deserves a look before the answer is used.
    figures : sequence of KeyFigure
        The answer in numbers.
    sections : sequence of Section
    assumed : sequence of str
    record : sequence of (name, text)
        Sources, versions, digests.
    """

    kind: str
    title: str
    said: Sequence[str]
    figures: Sequence[KeyFigure]
    sections: Sequence[Section]
    look: Sequence[str] = ()
    assumed: Sequence[str] = ()
    record: Sequence[tuple[str, str]] = field(default=())

    def html(self) -> str:
        """The page's text."""
        title = html.escape(f"{self.kind}: {self.title}")
        return (
            '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">'
            '<meta name="viewport" content="width=device-width,initial-scale=1">'
            f"<title>{title}</title><style>{stylesheet()}</style></head>\n<body>"
            '<a class="jump" href="#answer">To the answer</a>'
            f'{_header(self)}\n<main class="wrap">{_answer(self)}'
            f"{''.join(_section(s) for s in self.sections)}</main>\n"
            f"{_footer(self)}</body></html>\n"
        )


def _header(page: Page) -> str:
    steps = "".join(
        f'<i style="height:{100 * (i + 1) // _STEPS}%;'
        f'opacity:{0.12 + 0.5 * (i + 1) / _STEPS:.2f}"></i>'
        for i in range(_STEPS)
    )
    return (
        f'<header><div class="steps" aria-hidden="true">{steps}</div>'
        f'<div class="wrap"><p class="kind">{html.escape(page.kind)}</p>'
        f"<h1>{html.escape(page.title)}</h1></div></header>"
    )


def _answer(page: Page) -> str:
    look = ""
    if page.look:
        look = f'<div class="look" role="note">{_paragraphs(page.look)}</div>'
    key = "".join(_figure(f) for f in page.figures)
    links = "".join(
        f'<li><a href="#{s.anchor}">{html.escape(s.title)}</a></li>'
        for s in page.sections
    )
    return (
        f'<div id="answer" tabindex="-1"><div class="said">{_paragraphs(page.said)}'
        f'</div>{look}<dl class="key">{key}</dl></div>'
        f'<nav aria-label="Contents"><ul>{links}</ul></nav>'
    )


def _paragraphs(texts: Sequence[str]) -> str:
    return "".join(f"<p>{html.escape(text)}</p>" for text in texts)


def _figure(figure: KeyFigure) -> str:
    remark = f"<small>{html.escape(figure.remark)}</small>" if figure.remark else ""
    return (
        f"<div><dt>{html.escape(figure.name)}</dt>"
        f"<dd>{html.escape(figure.text)}{remark}</dd></div>"
    )


def _section(section: Section) -> str:
    body = "".join(_part(part) for part in section.parts)
    return (
        f'<section id="{section.anchor}"><h2>{html.escape(section.title)}</h2>'
        f"{body}</section>\n"
    )


def _part(part: str | Picture | Table) -> str:
    if isinstance(part, Picture):
        return (
            f'<figure><div class="sheet"><img src="{part.uri}" width="{part.width}" '
            f'height="{part.height}" alt="{html.escape(part.alt)}"></div>'
            f"<figcaption>{html.escape(part.caption)}</figcaption></figure>"
        )
    if isinstance(part, Table):
        return _table(part)
    return f"<p>{html.escape(part)}</p>"


def _table(table: Table) -> str:
    wordy = table.words | {0}
    head = "".join(
        f'<th scope="col"{_side(i, wordy)}>{html.escape(text)}</th>'
        for i, text in enumerate(table.header)
    )
    rows = "".join(_row(table, i, wordy) for i in range(len(table.rows)))
    long, more = "", ""
    if len(table.rows) > _LONG_TABLE:
        long = " long"
        more = f' <span class="screen">({len(table.rows)} rows: scroll)</span>'
    return (
        f'<div class="scroll{long}" tabindex="0" role="group" '
        f'aria-label="{html.escape(table.caption)}"><table>'
        f"<caption>{html.escape(table.caption)}{more}</caption>"
        f"<thead><tr>{head}</tr></thead><tbody>{rows}</tbody></table></div>"
    )


def _side(column: int, wordy: frozenset[int]) -> str:
    return "" if column in wordy else ' class="n"'


def _row(table: Table, index: int, wordy: frozenset[int]) -> str:
    first, *others = table.rows[index]
    swatch = ""
    if table.swatches:
        colour = html.escape(table.swatches[index])
        swatch = f'<span class="swatch" style="background:{colour}"></span>'
    cells = "".join(
        f"<td{_side(i, wordy)}>{html.escape(text)}</td>"
        for i, text in enumerate(others, start=1)
    )
    return f'<tr><th scope="row">{swatch}{html.escape(first)}</th>{cells}</tr>'


def _footer(page: Page) -> str:
    assumed = "".join(f"<li>{html.escape(text)}</li>" for text in page.assumed)
    if assumed:
        assumed = f"<h2>What was assumed</h2><ul>{assumed}</ul>"
    record = "".join(
        f"<li>{html.escape(name)}: <code>{html.escape(text)}</code></li>"
        for name, text in page.record
        if text
    )
    return (
        f'<footer><div class="wrap"><p class="safe">{html.escape(SAFETY)}</p>'
        f"{assumed}<h2>Where this comes from</h2><ul>{record}</ul></div></footer>"
    )
