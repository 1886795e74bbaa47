"""What a composition was grouped to before, found and taken away when it is grouped anew.

What was grouped before stands where it was (`members`, `matches` ...) in a run that has just read what changed, or was
set aside when the store was published in between (outdated.py).
"""

from __future__ import annotations

import duckdb

from ..ingest.withdraw import NOT_CURRENT
from ..store.rows import one_number
from .outdated import GRADES
from .replaced import COLUMNS

_OUTDATED = f"FROM outdated_members WHERE record_id IN (SELECT record_id FROM {NOT_CURRENT})"
_LEFT_EMPTY = "(SELECT composition FROM left_empty)"


def any_gone(connection: duckdb.DuckDBPyConnection) -> bool:
    """Whether something grouped is left of records that take no part in results any more. Read-only."""
    return bool(one_number(connection, f"SELECT count(*) {_OUTDATED}") or _any_left_empty(connection))


def _any_left_empty(connection: duckdb.DuckDBPyConnection) -> bool:
    """Whether a grouped composition in temp.touched has no current record; such are in the temporary table `left_empty`
    (composition), found among those that a record left."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE left_empty AS WITH left_ones AS MATERIALIZED (SELECT composition FROM touched "
        f"WHERE composition IN (SELECT composition FROM {NOT_CURRENT} "
        "UNION SELECT composition FROM record_versions WHERE change = 'replaced')) "
        "SELECT composition FROM left_ones EXCEPT SELECT composition FROM current_records "
        "WHERE composition IN (SELECT composition FROM left_ones)"
    )
    empty = one_number(connection, f"SELECT count(*) FROM grouped_compositions WHERE composition IN {_LEFT_EMPTY}")
    return empty > 0


def find_former(connection: duckdb.DuckDBPyConnection) -> None:
    """Make the temporary tables `in_place` (composition) of those in temp.changed_compositions of which rows stand
    where they were, and `former_members` of the members of grades same and near of their records."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE in_place AS SELECT composition FROM grouped_compositions "
        "WHERE composition IN (SELECT composition FROM changed_compositions)"
    )
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE former_members AS SELECT {COLUMNS} FROM members WHERE grade IN {GRADES} "
        "AND $some AND record_id IN (SELECT record_id FROM records WHERE composition IN "
        "(SELECT composition FROM changed_compositions))",
        {"some": one_number(connection, "SELECT count(*) FROM grouped_compositions") > 0},
    )


def forget_gone(connection: duckdb.DuckDBPyConnection, run_id: int) -> None:
    """Note and forget what was grouped of records that take no part in results any more; inside a transaction."""
    gone = (
        f"SELECT record_id FROM {NOT_CURRENT} WHERE composition IN (SELECT composition FROM touched) "
        f"UNION SELECT record_id {_OUTDATED}"
    )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE gone AS {gone}")
    if one_number(connection, "SELECT count(*) FROM gone"):
        where = "WHERE record_id IN (SELECT record_id FROM gone)"
        connection.execute(
            "INSERT INTO id_changes SELECT $1, grade, record_id, group_id, NULL, family_id, NULL FROM ("
            f"SELECT grade, record_id, group_id, family_id FROM members {where} AND grade IN {GRADES} "
            f"UNION SELECT grade, record_id, group_id, family_id FROM outdated_members {where}) "
            "ORDER BY grade, record_id",
            [run_id],
        )
        connection.execute(f"DELETE FROM members {where} AND grade IN {GRADES}")
        for table in ("outdated_members", "more_matches"):
            connection.execute(f"DELETE FROM {table} {where}")
    if _any_left_empty(connection):
        for table in ("matches", "refused_pins", "grouped_compositions"):
            connection.execute(f"DELETE FROM {table} WHERE composition IN {_LEFT_EMPTY}")


def clear_former(connection: duckdb.DuckDBPyConnection, done: str) -> None:
    """Take away what was grouped of the compositions of a table (composition, added), but members: of added ones the
    matches in temp.dropped alone; inside a transaction."""
    here = f"(SELECT composition FROM {done} WHERE composition IN (SELECT composition FROM in_place))"
    if not one_number(connection, f"SELECT count(*) FROM {here}"):
        return
    anew = f"(SELECT composition FROM {done} WHERE NOT added AND composition IN {here})"
    if one_number(connection, f"SELECT count(*) FROM {anew}"):
        connection.execute(f"DELETE FROM matches WHERE composition IN {anew}")
        records = f"(SELECT record_id FROM records WHERE composition IN {anew})"
        connection.execute(f"DELETE FROM more_matches WHERE record_id IN {records}")
    grown = f"(SELECT composition FROM {done} WHERE added AND composition IN {here})"
    if one_number(connection, f"SELECT count(*) FROM {grown}") and one_number(
        connection, "SELECT count(*) FROM dropped"
    ):
        connection.execute(
            "DELETE FROM matches WHERE (record_a, record_b) IN (SELECT (record_a, record_b) FROM dropped) "
            f"AND composition IN {grown}"
        )
    for table in ("refused_pins", "grouped_compositions"):
        connection.execute(f"DELETE FROM {table} WHERE composition IN {here}")
