"""Rows of `members` replaced by what the records are grouped to now: equal ones stay, changed ids are noted."""

from __future__ import annotations

import duckdb

from ..store.rows import one_number

COLUMNS = "grade, group_id, family_id, record_id, label, source, kept, witness_shift_angstrom, witness_strain"


def replace_members(
    connection: duckdb.DuckDBPyConnection, run_id: int, grades: tuple[str, str], whole: bool = False
) -> None:
    """Put the rows of temp.now_members (COLUMNS) in the place of those that their records had: in `members`, of which
    temp.former_members holds them, or in `outdated_members`. Notes the ids that are others now. Inside a transaction.

    whole: a record of former_members that now_members has not is in no group any more.
    """
    rows, join = "now_members", "LEFT JOIN" if whole else "JOIN"
    if one_number(connection, "SELECT count(*) FROM former_members"):
        gone = "UNION SELECT record_id FROM former_members WHERE record_id NOT IN (SELECT record_id FROM now_members)"
        connection.execute(
            f"CREATE OR REPLACE TEMP TABLE other_records AS SELECT DISTINCT record_id FROM (SELECT {COLUMNS} FROM "
            f"now_members EXCEPT SELECT {COLUMNS} FROM former_members) {gone if whole else ''}"
        )
        connection.execute(
            f"DELETE FROM members WHERE grade IN {grades} AND record_id IN (SELECT record_id FROM other_records "
            "WHERE record_id IN (SELECT record_id FROM former_members))"
        )
        rows = "now_members WHERE record_id IN (SELECT record_id FROM other_records)"
    connection.execute(f"INSERT INTO members SELECT {COLUMNS} FROM {rows} ORDER BY grade DESC, record_id")
    connection.execute(
        "INSERT INTO id_changes SELECT $1, b.grade, b.record_id, b.group_id, m.group_id, b.family_id, m.family_id "
        "FROM (SELECT grade, record_id, group_id, family_id FROM former_members UNION ALL "
        f"SELECT grade, record_id, group_id, family_id FROM outdated_members WHERE grade IN {grades}) b "
        f"{join} now_members m USING (grade, record_id) WHERE m.group_id IS DISTINCT FROM b.group_id "
        "OR m.family_id IS DISTINCT FROM b.family_id ORDER BY b.grade, b.record_id",
        [run_id],
    )
    if one_number(connection, f"SELECT count(*) FROM outdated_members WHERE grade IN {grades}"):
        connection.execute("DELETE FROM outdated_members WHERE record_id IN (SELECT record_id FROM now_members)")
