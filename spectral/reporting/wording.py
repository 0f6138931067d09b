"""Numbers as people read them: few digits, error beside value, unit behind."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Sequence

MINUS = "\N{MINUS SIGN}"
NONE = "\N{EM DASH}"
NARROW_SPACE = "\N{NARROW NO-BREAK SPACE}"
TIMES = "\N{MULTIPLICATION SIGN}"
SIGMA = "\N{GREEK SMALL LETTER SIGMA}"
GRAMS = "g/cm\N{SUPERSCRIPT TWO}"
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_LARGEST_PLAIN = 1e7
_SMALLEST_PLAIN = 1e-5


def number(value: float, digits: int = 3, *, sign: bool = False) -> str:
    """A value to so many significant digits.

    Examples
    --------
    >>> number(0.020948), number(12345.6), number(float("nan"))
    ('0.0209', '12346', '—')
    """
    if not math.isfinite(value):
        return NONE
    size = abs(value)
    if size >= _LARGEST_PLAIN or 0.0 < size < _SMALLEST_PLAIN:
        text = _power(value, digits)
    else:
        places = 0 if size == 0.0 else max(digits - 1 - _exponent(size, digits), 0)
        text = f"{value:.{places}f}"
    return _signed(text, sign=sign)


def fixed(value: float, places: int, *, sign: bool = False) -> str:
    """A value to so many decimal places."""
    if not math.isfinite(value):
        return NONE
    return _signed(f"{value:.{places}f}", sign=sign)


def with_error(value: float, error: float, *, sign: bool = False) -> str:
    """A value and its standard error, to two digits of the error.

    Examples
    --------
    >>> with_error(1.23456, 0.0321)
    '1.235 ± 0.032'
    """
    if not (math.isfinite(value) and math.isfinite(error)) or error <= 0.0:
        return number(value, sign=sign)
    places = max(1 - _exponent(error, 2), 0)
    return f"{fixed(value, places, sign=sign)} ± {fixed(error, places)}"


def beside(value: float, error: float) -> str:
    """A value to the decimal place that its error's second digit has.

    Examples
    --------
    >>> beside(1.23456, 0.0321), beside(2.5, float("nan"))
    ('1.235', '2.50')
    """
    if not (math.isfinite(value) and math.isfinite(error)) or error <= 0.0:
        return number(value)
    return fixed(value, max(1 - _exponent(error, 2), 0))


def percent(share: float, places: int = 1) -> str:
    r"""A share in per cent; never 0 or 100 unless it is exactly that.

    Examples
    --------
    >>> percent(0.99999), percent(0.5), percent(0.00001)
    ('> 99.9\u202f%', '50.0\u202f%', '< 0.1\u202f%')
    """
    if not math.isfinite(share):
        return NONE
    least = 10.0**-places
    value = 100.0 * share
    if 0.0 < value < least / 2:
        return f"< {least:.{places}f}{NARROW_SPACE}%"
    if 100.0 - least / 2 < value < 100.0:
        return f"> {100.0 - least:.{places}f}{NARROW_SPACE}%"
    return f"{value:.{places}f}{NARROW_SPACE}%"


def counts(value: float) -> str:
    """Counts, or a mean or median of them, with at most one decimal place.

    Examples
    --------
    >>> counts(9908.5), counts(716.0)
    ('9908.5', '716')
    """
    return (
        number(value) if not math.isfinite(value) else f"{value:.1f}".removesuffix(".0")
    )


def count(items: int, one: str, many: str = "") -> str:
    """A whole number and its noun.

    Examples
    --------
    >>> count(1, "pixel"), count(0, "pixel"), count(2, "series", "series")
    ('1 pixel', 'no pixel', '2 series')
    """
    if items == 0:
        return f"no {one}"
    return f"{items} {one}" if items == 1 else f"{items} {many or one + 's'}"


def listed(words: Sequence[str], *, last: str = "and") -> str:
    """Words with commas, and a word before the last.

    Examples
    --------
    >>> listed(["a", "b", "c"])
    'a, b and c'
    """
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} {last} {words[-1]}"


def _exponent(size: float, digits: int) -> int:
    """Decimal exponent after rounding to so many digits."""
    return int(f"{size:.{digits - 1}e}".split("e")[1])


def _power(value: float, digits: int) -> str:
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    raised = str(int(exponent)).translate(_RAISED)
    return f"{mantissa}{NARROW_SPACE}{TIMES}{NARROW_SPACE}10{raised}"


def _signed(text: str, *, sign: bool) -> str:
    if text.startswith("-"):
        nothing = not any(c in "123456789" for c in text)
        return text[1:] if nothing else MINUS + text[1:]
    return f"+{text}" if sign and any(c in "123456789" for c in text) else text
