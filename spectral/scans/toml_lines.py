"""Where each table and key of a TOML text stands, for messages with a line number.

The values themselves are parsed by the standard library, which forgets the lines.
This scan of the text only follows headers, keys, brackets and quotes.
TOML is an open standard: https://toml.io/en/v1.0.0.
"""

from __future__ import annotations

import re

#: Place of a value: table names, positions in arrays of tables, key.
Place = tuple[str | int, ...]

_BARE_OR_QUOTED = r"""(?:[A-Za-z0-9_-]+|"(?:[^"\\]|\\.)*"|'[^']*')"""
_DOTTED = rf"{_BARE_OR_QUOTED}(?:\s*\.\s*{_BARE_OR_QUOTED})*"
_HEADER = re.compile(rf"\s*\[\s*({_DOTTED})\s*\]\s*(?:#.*)?$")
_ARRAY_HEADER = re.compile(rf"\s*\[\[\s*({_DOTTED})\s*\]\]\s*(?:#.*)?$")
_KEY = re.compile(rf"\s*({_DOTTED})\s*=")
_TOKEN = re.compile(r'"""|\'\'\'|"(?:[^"\\]|\\.)*"|\'[^\']*\'|#.*|[\[\]{}]', re.DOTALL)


def _parts(dotted: str) -> Place:
    return tuple(part.strip("\"'") for part in re.findall(_BARE_OR_QUOTED, dotted))


class Lines:
    """Line numbers of a TOML text, from 1."""

    def __init__(self, text: str) -> None:
        self._found: dict[Place, int] = {}
        self._arrays: dict[Place, int] = {}
        self._scan(text)

    def _resolve(self, names: Place) -> Place:
        """Put the position of the latest element after each array of tables."""
        place: Place = ()
        for name in names:
            place = (*place, name)
            if place in self._arrays:
                place = (*place, self._arrays[place])
        return place

    def _scan(self, text: str) -> None:
        table: Place = ()
        depth, quotes = 0, ""
        for number, line in enumerate(text.splitlines(), start=1):
            rest = line
            if not quotes and depth == 0:
                if match := _ARRAY_HEADER.match(line):
                    names = _parts(match[1])
                    array = (*self._resolve(names[:-1]), names[-1])
                    self._arrays[array] = self._arrays.get(array, -1) + 1
                    table = (*array, self._arrays[array])
                    self._found[table] = number
                    continue
                if match := _HEADER.match(line):
                    table = self._resolve(_parts(match[1]))
                    self._found.setdefault(table, number)
                    continue
                if match := _KEY.match(line):
                    self._found[(*table, *_parts(match[1]))] = number
                    rest = line[match.end() :]
            depth, quotes = _follow(rest, depth, quotes)

    def of(self, place: Place) -> int:
        """Line of a value, or of the nearest table that holds it; 1 if neither."""
        while place:
            if place in self._found:
                return self._found[place]
            place = place[:-1]
        return 1


def _follow(line: str, depth: int, quotes: str) -> tuple[int, str]:
    """Bracket depth and open multi-line quotes at the end of a line."""
    rest = line
    while rest:
        if quotes:
            _, closed, rest = rest.partition(quotes)
            if not closed:
                return depth, quotes
            quotes = ""
            continue
        match = _TOKEN.search(rest)
        if match is None:
            break
        token, rest = match[0], rest[match.end() :]
        if token in ('"""', "'''"):
            quotes = token
        elif token in ("[", "{"):
            depth += 1
        elif token in ("]", "}"):
            depth -= 1
        elif token.startswith("#"):
            break
    return depth, quotes
