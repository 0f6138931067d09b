"""A table of a scan script, read key by key, with the line in every message."""

from __future__ import annotations

import difflib
import math
import tomllib
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, NoReturn

from spectral.errors import ScanError
from spectral.scans.toml_lines import Lines, Place

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping
    from pathlib import Path


@dataclass(frozen=True, slots=True, eq=False)
class Table:
    """A table of a TOML text.

    Attributes
    ----------
    file : Path
    values : mapping
    lines : Lines
    place : tuple
        Where the table stands in its file.
    base : Table or None
        The table taken by reference (`use`), asked where this one is silent.
    referred : bool
        Whether the file itself was taken by reference; then it may not go on to a
        third one.
    """

    file: Path
    values: Mapping[str, Any]
    lines: Lines
    place: Place = ()
    base: Table | None = None
    referred: bool = False

    @property
    def line(self) -> int:
        """Line of the table itself."""
        return self.lines.of(self.place)

    def stop(self, key: str, text: str) -> NoReturn:
        """Raise one sentence that begins with file and line of a key."""
        line = self.lines.of((*self.place, key) if key else self.place)
        msg = f"{self.file}, line {line}: {text}"
        raise ScanError(msg)

    def owner(self, key: str) -> Table | None:
        """The table that holds a key: this one, or the one it refers to."""
        if key in self.values:
            return self
        return self.base.owner(key) if self.base is not None else None

    def known_keys(
        self, allowed: Iterable[str], *, meant: Mapping[str, str] | None = None
    ) -> None:
        """Refuse keys that mean nothing, with the likely spelling.

        Parameters
        ----------
        allowed : iterable of str
        meant : mapping, optional
            Other words for a key, where spelling does not lead to it.
        """
        allowed = sorted(allowed)
        for key in self.values:
            if key not in allowed:
                close = difflib.get_close_matches(key, allowed, n=1)
                close = [meant[key]] if meant and key in meant else close
                hint = f"; is {close[0]!r} meant?" if close else ""
                known = "" if close else f"; known are {', '.join(allowed)}"
                self.stop(key, f"{key!r} is not known here{hint}{known}")

    def text(self, key: str, default: str | None = None) -> str:
        """A text; required if there is no default."""
        owner = self._present(key, default is not None)
        if owner is None:
            return default or ""
        value = owner.values[key]
        if not isinstance(value, str):
            owner.stop(key, f"{key} must be text in quotes, not {value!r}")
        return value

    def number(
        self, key: str, default: float | None = None, *, zero: bool = False
    ) -> float:
        """A number above zero, or from zero on; required if there is no default."""
        owner = self._present(key, default is not None)
        if owner is None:
            return math.nan if default is None else default
        return owner.checked_number(key, owner.values[key], zero=zero)

    def checked_number(self, key: str, value: object, *, zero: bool) -> float:
        """One value as a finite number above zero, or from zero on."""
        number = math.nan
        if isinstance(value, (int, float)) and not isinstance(value, bool):
            number = float(value)
        if not math.isfinite(number) or number < 0 or (number == 0 and not zero):
            wanted = "zero or more" if zero else "a number above zero"
            self.stop(key, f"{key} must be {wanted}, not {value!r}")
        return number

    def angle(self, key: str) -> float | None:
        """A finite number of either sign, None if it is absent."""
        owner = self.owner(key)
        if owner is None:
            return None
        value = owner.values[key]
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            owner.stop(key, f"{key} must be a number, not {value!r}")
        return float(value)

    def whole(self, key: str, default: int | None = None) -> int:
        """A whole number from 1 on; required if there is no default."""
        owner = self._present(key, default is not None)
        if owner is None:
            return default or 1
        value = owner.values[key]
        if isinstance(value, bool) or not isinstance(value, int) or value < 1:
            owner.stop(key, f"{key} must be a whole number from 1 on, not {value!r}")
        return value

    def numbers(self, key: str) -> list[float]:
        """A list of numbers above zero that must be there."""
        owner = self._present(key, False)
        if owner is None:
            return []
        value = owner.values[key]
        if not isinstance(value, list) or not value:
            owner.stop(key, f"{key} must be a list of numbers, not {value!r}")
        return [owner.checked_number(key, item, zero=False) for item in value]

    def _present(self, key: str, optional: bool) -> Table | None:
        owner = self.owner(key)
        if owner is None and not optional:
            where = f"[{self.place[0]}] " if self.place else "the script "
            self.stop("", f"{where}needs {key}")
        return owner

    def table(self, key: str) -> Table:
        """A sub-table; an empty one if it is absent. Follows `use`."""
        value = self.values.get(key, {})
        if not isinstance(value, dict):
            self.stop(key, f"{key} must be a table: [{key}]")
        found = replace(self, values=value, place=(*self.place, key), base=None)
        if "use" not in value:
            return found
        return replace(found, base=found.used().table(key))

    def tables(self, key: str) -> list[Table]:
        """Tables of an array; those of another file where one says `use`."""
        owner = self.owner(key)
        if owner is None:
            return []
        value = owner.values[key]
        if not isinstance(value, list) or not all(isinstance(v, dict) for v in value):
            owner.stop(key, f"{key} must be a list of tables: [[{key}]]")
        found = []
        for i, item in enumerate(value):
            one = replace(owner, values=item, place=(*owner.place, key, i), base=None)
            found += one.used().tables(key) if "use" in item else [one]
        return found

    def used(self) -> Table:
        """The whole text of the file that `use` names."""
        path = self.file.parent / self.text("use")
        if not path.is_file():
            self.stop("use", f"there is no file {path}")
        if self.referred:
            self.stop("use", "a file that is used cannot use another one")
        return read_table(path, referred=True)


def read_table(path: Path, *, referred: bool = False) -> Table:
    """Content of a TOML file.

    Raises
    ------
    ScanError
        If there is no such file or it is not TOML, with the line.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError as error:
        msg = f"{path}: there is no such file"
        raise ScanError(msg) from error
    except UnicodeDecodeError as error:
        msg = f"{path}: this is not a text file in UTF-8"
        raise ScanError(msg) from error
    try:
        values = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        said = str(error)
        found = said.rpartition("(at line ")
        line = found[2].partition(",")[0] if found[1] else ""
        where = f", line {line}" if line.isdigit() else ", at its end"
        what = (found[0] or said).strip().rstrip(".")
        msg = f"{path}{where}: not valid TOML: {what[:1].lower()}{what[1:]}"
        raise ScanError(msg) from error
    return Table(path, values, Lines(text), referred=referred)
