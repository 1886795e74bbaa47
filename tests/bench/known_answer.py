"""A store of an invented collection against the known answer: which records show the same crystal."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import duckdb

FOUND = 0.999
"""Share of the copies that has to be found, with sites moved by up to 0.02 angstrom."""


@dataclass(frozen=True, slots=True)
class Answer:
    """How the groups of a store compare with the known answer, at grade near."""

    records: int
    crystals: int
    families: int
    groups: int
    merged_wrongly: int
    """Families that hold more than one crystal."""

    copies: int
    """Records beyond the first of each crystal."""

    found: float
    """Share of the copies that stand in the family of another record of their crystal."""

    set_aside: float
    """Share of the copies that are set aside in the groups."""

    def as_json(self) -> dict[str, Any]:
        """Ready for json.dumps."""
        return asdict(self)


def answer_of(store: Path) -> Answer:
    """Compare, without judging. The known answer stands in the property `crystal` of every record."""
    connection = duckdb.connect(str(store), read_only=True)
    try:
        connection.execute(
            "CREATE TEMP TABLE known AS SELECT m.record_id, m.family_id, m.group_id, "
            "json_extract_string(r.properties, '$.crystal') AS crystal "
            "FROM members m JOIN current_records r USING (record_id) WHERE m.grade = 'near'"
        )
        found = connection.execute(
            "SELECT count(*), count(DISTINCT crystal), count(DISTINCT family_id), count(DISTINCT group_id), "
            "count(DISTINCT (crystal, family_id)), (SELECT count(*) FROM (SELECT family_id FROM known "
            "GROUP BY family_id HAVING count(DISTINCT crystal) > 1)) FROM known"
        ).fetchall()
    finally:
        connection.close()
    records, crystals, families, groups, pieces, merged = found[0]
    copies = records - crystals
    share = (records - pieces) / copies if copies else 1.0
    return Answer(
        records, crystals, families, groups, merged, copies, share, (records - groups) / copies if copies else 1.0
    )


def check_answer(store: Path, records: int, crystals: int) -> Answer:
    """The answer, after AssertionError where records or crystals are missing, a crystal is merged with another, or too
    few copies are found."""
    answer = answer_of(store)
    assert answer.records == records, f"{answer.records} records are grouped, not {records}"
    assert answer.crystals == crystals, f"{answer.crystals} crystals are there, not {crystals}"
    assert answer.merged_wrongly == 0, f"{answer.merged_wrongly} families hold different crystals"
    assert answer.found >= FOUND, f"only {answer.found:.5f} of the copies are found"
    return answer
