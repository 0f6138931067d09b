"""Name patterns of a scan script's image files, and the order of their pages."""

from __future__ import annotations

import string

#: What a name pattern may stand for.
PLACEHOLDERS = ("exposure", "threshold", "threshold_kev", "frame", "step", "repeat")
#: What the pages of one file may run through, slowest first by default.
PAGE_ORDER = ("exposure", "threshold", "frame")


def pattern_fault(pattern: str) -> str:
    """What is wrong with a name pattern, "" if nothing is."""
    try:
        fields = [name for _, name, _, _ in string.Formatter().parse(pattern)]
    except ValueError as error:
        return f"the pattern {pattern!r} cannot be read: {error}"
    for name in fields:
        if name is not None and name not in PLACEHOLDERS:
            return f"the pattern {pattern!r} holds {{{name}}}; known are " + ", ".join(
                f"{{{p}}}" for p in PLACEHOLDERS
            )
    sample: dict[str, object] = dict.fromkeys(PLACEHOLDERS, 1)
    sample["step"] = "name"
    sample["threshold_kev"] = 20.0
    try:
        pattern.format(**sample)
    except (ValueError, TypeError) as error:
        return f"the pattern {pattern!r} cannot be filled in: {error}"
    return ""
