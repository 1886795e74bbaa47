"""Groups that need no comparison: records of equal content (`copy`) and of equal canonical form (`key`)."""

from __future__ import annotations

import duckdb

from .pinned import part_pinned

GRADES = {"copy": "r.content_hash", "key": "x.crystal_key"}


def group_exact(connection: duckdb.DuckDBPyConnection, run_id: int) -> None:
    """Compute `members` of grades copy and key of the compositions in temp.touched anew from the current records and
    temp.ranks, and note every id that changed.

    The kept record of a group is its best by the keep rules (rank.py): a pure function of the current records, the
    rules and the pins. To be called inside a transaction.
    """
    where = (
        "WHERE grade IN ('copy', 'key') AND record_id IN "
        "(SELECT record_id FROM records WHERE composition IN (SELECT composition FROM touched))"
    )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE members_before AS SELECT * FROM members {where}")
    connection.execute(f"DELETE FROM members {where}")
    for grade, column in GRADES.items():
        connection.execute(
            "INSERT INTO members "
            "SELECT $1, first_value(r.record_id) OVER kept, min(r.record_id) OVER family, r.record_id, r.label, "
            "r.source, row_number() OVER kept = 1, 0.0, 0.0 "
            "FROM current_records r JOIN canonical_forms x USING (record_id) JOIN ranks k USING (record_id) "
            "WHERE r.composition IN (SELECT composition FROM touched) "
            f"WINDOW kept AS (PARTITION BY {column} ORDER BY k.rank), "
            f"family AS (PARTITION BY {column}) ORDER BY r.record_id",
            [grade],
        )
        part_pinned(connection, grade)
    note_id_changes(connection, run_id)


def note_id_changes(connection: duckdb.DuckDBPyConnection, run_id: int) -> None:
    """Rows of `id_changes` for records of temp.members_before whose group or family id is another now, or none."""
    connection.execute(
        "INSERT INTO id_changes SELECT $1, b.grade, b.record_id, b.group_id, m.group_id, b.family_id, m.family_id "
        "FROM members_before b LEFT JOIN (SELECT * FROM members WHERE record_id IN "
        "(SELECT record_id FROM members_before)) m USING (grade, record_id) "
        "WHERE m.group_id IS DISTINCT FROM b.group_id OR m.family_id IS DISTINCT FROM b.family_id "
        "ORDER BY b.grade, b.record_id",
        [run_id],
    )
    connection.execute("DROP TABLE temp.members_before")
