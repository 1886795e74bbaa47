"""What the sections of a report are made from, read once. Read-only."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb

from ..settings import Settings
from ..store.stages import stored_settings
from .questions import question_named
from .report_groups import Groups, find_groups
from .report_page import paragraph
from .status import status
from .survey import Survey, survey
from .tolerance_curve import ToleranceCurve, tolerance_curve

MOST_SOURCES = 1000
"""Rows of the survey by source."""

HOLDS = """
SELECT h.reason, coalesce(k.source || ':' || k.label, r.source || ':' || r.label) AS record, h.message
FROM holds h
LEFT JOIN records k ON k.record_id = h.group_id
LEFT JOIN records r ON r.record_id = h.record_id
WHERE h.grade = $grade
ORDER BY ALL"""


@dataclass(frozen=True, slots=True)
class Facts:
    """What several sections need."""

    connection: duckdb.DuckDBPyConnection
    settings: Settings
    status: dict[str, Any]
    survey: Survey
    curve: ToleranceCurve | None

    grade: str | None
    """near where it is computed, else key; None in an empty store."""

    groups: Groups | None

    holds: list[tuple[str, str, str]]
    """Reason, kept record of the group or the record, and message, at the grade."""

    def answer(self, question: str, **values: Any) -> tuple[tuple[str, ...], list[tuple[Any, ...]]]:
        """Columns and rows of a named question."""
        asked = question_named(question)
        cursor = self.connection.execute(asked.sql, {p.name: p.default for p in asked.parameters} | values)
        return tuple(d[0] for d in cursor.description or []), cursor.fetchall()


def read_facts(connection: duckdb.DuckDBPyConnection) -> Facts:
    """The facts of a store, under its own settings."""
    settings = Settings.model_validate(stored_settings(connection))
    told = status(connection)
    computed = [g["grade"] for g in told["groups"]]
    grade = next((g for g in ("near", "key") if g in computed), None)
    groups = find_groups(connection, grade, settings.near_shift, settings.near_strain) if grade else None
    found = survey(connection, "source", MOST_SOURCES)
    holds = connection.execute(HOLDS, {"grade": grade}).fetchall()
    return Facts(connection, settings, told, found, tolerance_curve(connection), grade, groups, holds)


def ungrouped() -> str:
    """Instead of a section that needs groups."""
    return paragraph("Nothing is grouped yet. Group the store with: lattice-census group")


def counted(count: int, word: str) -> str:
    """`1 record`, `2 records`."""
    return f"{count:,} {word}{'' if count == 1 else 's'}"
