"""Groups that need no comparison: records of equal content (`copy`) and of equal canonical form (`key`)."""

from __future__ import annotations

import duckdb

from .pinned import part_pinned
from .replaced import COLUMNS, replace_members

GRADES = ("copy", "key")


def group_exact(connection: duckdb.DuckDBPyConnection, run_id: int) -> None:
    """Compute `members` of grades copy and key of the records in temp.touched_keys anew from those that are current and
    temp.ranks, and note every id that changed. Records of equal content have one key.

    The kept record of a group is its best by the keep rules (rank.py): a pure function of the current records, the
    rules and the pins. To be called inside a transaction.
    """
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE former_members AS SELECT {COLUMNS} FROM members WHERE grade IN {GRADES} AND "
        "record_id IN (SELECT record_id FROM touched_keys)"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE now_members AS SELECT grade, first_value(record_id) OVER kept AS group_id, "
        "min(record_id) OVER family AS family_id, record_id, label, source, row_number() OVER kept = 1 AS kept, "
        "0.0::DOUBLE AS witness_shift_angstrom, 0.0::DOUBLE AS witness_strain FROM ("
        "SELECT g.grade, r.record_id, r.label, r.source, k.rank, "
        "CASE g.grade WHEN 'copy' THEN r.content_hash ELSE x.crystal_key END AS mark "
        "FROM current_records r JOIN touched_keys x USING (record_id) JOIN ranks k USING (record_id) "
        f"CROSS JOIN (SELECT unnest({list(GRADES)}) AS grade) g) "
        "WINDOW kept AS (PARTITION BY grade, mark ORDER BY rank), family AS (PARTITION BY grade, mark)"
    )
    for grade in GRADES:
        part_pinned(connection, grade)
    replace_members(connection, run_id, GRADES, whole=True)
