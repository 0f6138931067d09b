"""The record of a run that made maps, as people read it."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

from spectral.reporting.page import Table
from spectral.reporting.wording import listed, number

if TYPE_CHECKING:
    from spectral.reporting.maps_summary import MapsSummary

_UNITS = {"_kv": "kV", "_g_cm3": "g/cm3"}
_FEW = 0.001


def record_table(summary: MapsSummary) -> Table:
    """All entries of the record."""
    return Table(
        caption="As written in the maps' file",
        header=("subject", "entry"),
        rows=[
            (k.replace("_", " "), plain_entry(v))
            for k, v in summary.process.items()
            if v
        ],
        words=frozenset({1}),
    )


def plain_entry(text: str) -> str:
    """An entry of the record without JSON's brackets."""
    try:
        value = json.loads(text)
    except json.JSONDecodeError:
        return text
    return _spelled(value)


def _spelled(value: object) -> str:
    if isinstance(value, dict):
        return "\n".join(
            f"{_unit_apart(str(k))}: {_within_a_line(v)}" for k, v in value.items()
        )
    if isinstance(value, list):
        return ", ".join(_spelled(v) for v in value) if value else "none"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:g}" if abs(value) >= _FEW else number(value, 3)
    return str(value)


def _within_a_line(value: object) -> str:
    """An entry in an entry: names beside their values, with commas between."""
    if isinstance(value, dict):
        return ", ".join(f"{k} {_within_a_line(v)}" for k, v in value.items())
    return _spelled(value)


def _unit_apart(name: str) -> str:
    """A field's name with its unit as people write it."""
    for ending, unit in _UNITS.items():
        if name.endswith(ending):
            return f"{name.removesuffix(ending).replace('_', ' ')} ({unit})"
    return name.replace("_", " ")


def sources_and_assumptions(
    summary: MapsSummary,
) -> tuple[list[tuple[str, str]], list[str]]:
    """Sources for the foot, and assumptions as sentences."""
    process = summary.process
    record = [
        (words, process.get(key, ""))
        for key, words in (
            ("scan", "scan"),
            ("scan_digest", "SHA-256 of the scan"),
            ("calibration_of", "calibrated with"),
            ("calibration_digest", "SHA-256 of the calibration"),
            ("program", "program"),
            ("version", "version"),
            ("date", "date"),
        )
    ]
    facts = _mapping(process.get("assumed", ""))
    if "cross_sections" in facts:
        record.append(("cross sections", str(facts["cross_sections"])))
    assumed = []
    if "voltage_kv" in facts:
        assumed.append(f"tube voltage {facts['voltage_kv']} kV, nominal")
    filters = facts.get("filters")
    if isinstance(filters, list):
        assumed.append(f"beam filters: {listed(filters) if filters else 'none named'}")
    if "sensor" in facts:
        assumed.append(f"sensor: {facts['sensor']}")
    densities = facts.get("densities_g_cm3")
    if isinstance(densities, dict):
        assumed += [f"density of {k}: {v} g/cm3" for k, v in densities.items()]
    for source in (facts.get("assumptions"), _list(process.get("notes", ""))):
        if isinstance(source, list):
            assumed += [str(text) for text in source]
    return record, assumed


def _mapping(text: str) -> dict[str, object]:
    try:
        found = json.loads(text)
    except json.JSONDecodeError:
        return {}
    return found if isinstance(found, dict) else {}


def _list(text: str) -> list[object]:
    try:
        found = json.loads(text)
    except json.JSONDecodeError:
        return []
    return found if isinstance(found, list) else []


def numbers_in(text: str) -> list[float]:
    """A list of numbers out of an entry; empty if it holds none."""
    try:
        values = json.loads(text)
    except json.JSONDecodeError:
        return []
    if not isinstance(values, list):
        return []
    return [float(v) for v in values if isinstance(v, (int, float))]
