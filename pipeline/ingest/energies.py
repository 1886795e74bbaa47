"""What a record says of itself beside its structure: energy in one unit, theory, split, date."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from ..model.batch import Ints
from ..settings import SourceSettings

# CODATA 2018: Hartree energy 27.211386245988 eV; Rydberg its half; 1 eV = 96.48533212 kJ/mol (values from memory).
EV_OF = {"eV": 1.0, "eV/site": 1.0, "Ha": 27.211386245988, "Ry": 13.605693122994, "kJ/mol": 1 / 96.48533212}


@dataclass(frozen=True, slots=True)
class RecordFacts:
    """Columns of `records` that come from the properties."""

    energy_ev_per_site: float | None
    theory: str | None
    split: str | None
    record_date: datetime | None
    properties: str
    """Canonical JSON: keys sorted."""


def record_facts(
    properties: list[str], in_text: list[dict[str, object]], sites: Ints, source: SourceSettings
) -> list[RecordFacts]:
    """Facts of each record from its properties (JSON text), those in its structure text, and its (n,) site counts.

    Energies in eV, Ha, Ry and kJ/mol are of the whole given cell, eV/site of one site. Without a unit no energy is
    taken: the number stays in the properties.
    """
    out = []
    for text, inner, count in zip(properties, in_text, sites.tolist(), strict=True):
        values: dict[str, Any] = json.loads(text)
        if inner:
            values = {**inner, **values}
            text = json.dumps(values, sort_keys=True, ensure_ascii=False, default=str)
        theory = source.theory
        if source.theory_column is not None:
            theory = _word(values.get(source.theory_column)) or theory
        out.append(
            RecordFacts(
                _energy(values, count, source),
                theory,
                _word(values.get(source.split_column)) if source.split_column is not None else None,
                _date(values.get(source.date_column)) if source.date_column is not None else None,
                text,
            )
        )
    return out


def _energy(values: dict[str, Any], sites: int, source: SourceSettings) -> float | None:
    if source.energy_column is None or source.energy_unit is None:
        return None
    try:
        value = float(values[source.energy_column]) * EV_OF[source.energy_unit]
    except (KeyError, TypeError, ValueError):
        return None
    if not math.isfinite(value):
        return None
    return value if source.energy_unit == "eV/site" else value / sites


def _word(value: Any) -> str | None:
    return None if value is None or value == "" else str(value)


def _date(value: Any) -> datetime | None:
    """ISO 8601 (a bare date too), as UTC without a zone; a Unix time in seconds where it is a number."""
    if value is None or value == "" or isinstance(value, bool):
        return None
    try:
        if isinstance(value, int | float):
            return datetime.fromtimestamp(value, UTC).replace(tzinfo=None)
        found = datetime.fromisoformat(str(value))
    except (ValueError, OverflowError, OSError):
        return None
    return found.astimezone(UTC).replace(tzinfo=None) if found.tzinfo else found
