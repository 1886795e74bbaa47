"""What was grouped of compositions that have changed: taken out of the results, and kept until `group` makes it anew.

Members are kept to tell how ids change; matches, where the list of a composition is complete, to be taken over where
only records were added since (additions.py).
"""

from __future__ import annotations

import duckdb

from ..ingest.touched import settings_changed
from ..settings import Settings
from ..store.rows import one_number
from .digest import digest_compositions
from .exact import note_id_changes

GRADES = ("same", "near")

GROUPED = "SELECT count(*) FROM grouped_compositions"
WAITING = (
    "SELECT count(DISTINCT composition) FROM current_records "
    "WHERE composition NOT IN (SELECT composition FROM grouped_compositions)"
)
"""Query of the number of compositions that `group` has to work on."""

PINNED = (
    "SELECT r.composition FROM pins p JOIN records r ON r.record_id = p.record_id OR r.record_id = p.other_record_id "
    "WHERE p.kind IN ('apart', 'together')"
)
"""Query of compositions in which pairs were ever pinned: their matches may stand by other records than the smallest."""


def set_outdated_aside(connection: duckdb.DuckDBPyConnection, settings: Settings) -> int:
    """Take the rows of those compositions in temp.touched that are not as they were grouped out of `members` and
    `matches`; temp.ranks holds the ranks of their records.

    So that no result speaks of records as they were; `group` makes them anew and compares the ids. To be called inside
    a transaction. Returns the number of compositions that wait for `group`, once any was grouped.
    """
    if not one_number(connection, GROUPED):
        return 0
    digest_compositions(connection, settings, "touched")
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE stale AS SELECT composition FROM touched WHERE composition IN "
        "(SELECT composition FROM changed_compositions) OR composition NOT IN (SELECT composition FROM current_records)"
    )
    # The composition of a replaced record may be another now: it is touched, and so is the one it had.
    set_aside(connection, "stale", keep_matches=not settings_changed(connection, settings))
    return one_number(connection, WAITING)


def set_aside(connection: duckdb.DuckDBPyConnection, table: str, keep_matches: bool) -> None:
    """Take what was grouped of the compositions in a table away; who was a member of what stays in `outdated_members`.

    keep_matches: complete lists of matches stay in `outdated_matches`. Inside a transaction.
    """
    compositions = f"(SELECT composition FROM {table})"
    grouped = f"(SELECT composition FROM grouped_compositions WHERE composition IN {compositions})"
    records = f"(SELECT record_id FROM records WHERE composition IN {compositions})"
    for name in ("outdated_matches", "outdated_compositions"):  # of an earlier time
        connection.execute(f"DELETE FROM {name} WHERE composition IN {grouped}")
    if keep_matches:
        connection.execute(
            "INSERT INTO outdated_compositions SELECT composition, run_id, records, most_candidates, close_pairs "
            f"FROM grouped_compositions WHERE composition IN {compositions} AND composition NOT IN ({PINNED}) "
            "AND composition NOT IN "
            "(SELECT composition FROM records WHERE record_id IN (SELECT record_id FROM more_matches)) "
            "ORDER BY composition"
        )
        connection.execute(
            "INSERT INTO outdated_matches SELECT * FROM matches "
            f"WHERE composition IN {grouped} AND composition IN (SELECT composition FROM outdated_compositions)"
        )
    where = f"WHERE grade IN {GRADES} AND record_id IN {records}"
    connection.execute(
        f"INSERT INTO outdated_members SELECT grade, group_id, family_id, record_id FROM members {where}"
    )
    connection.execute(f"DELETE FROM members {where}")
    for name in ("matches", "grouped_compositions", "refused_pins"):
        connection.execute(f"DELETE FROM {name} WHERE composition IN {compositions}")
    connection.execute(f"DELETE FROM more_matches WHERE record_id IN {records}")


def forget_outdated(connection: duckdb.DuckDBPyConnection) -> None:
    """Drop the matches that were kept, when every composition is grouped; in a transaction of its own."""
    for name in ("outdated_matches", "outdated_compositions"):
        if one_number(connection, f"SELECT count(*) FROM {name}"):
            connection.execute(f"DELETE FROM {name}")


def note_changes(connection: duckdb.DuckDBPyConnection, run_id: int, records: str) -> None:
    """Note how the ids of records (a query) that were grouped before have changed, and forget what they were."""
    where = f"WHERE record_id IN ({records})"
    connection.execute(f"CREATE OR REPLACE TEMP TABLE members_before AS SELECT * FROM outdated_members {where}")
    if one_number(connection, "SELECT count(*) FROM members_before"):
        connection.execute(f"DELETE FROM outdated_members {where}")
        note_id_changes(connection, run_id)


def note_changed_ids(connection: duckdb.DuckDBPyConnection, run_id: int, grouped: str) -> None:
    """As `note_changes` for the records of a table with record_id, same_group, same_family, near_group, near_family:
    nothing of `members` is read."""
    if not one_number(connection, "SELECT count(*) FROM outdated_members"):
        return
    now = " UNION ALL ".join(
        f"SELECT '{grade}' AS grade, record_id, {grade}_group AS group_id, {grade}_family AS family_id FROM {grouped}"
        for grade in GRADES
    )
    connection.execute(
        "INSERT INTO id_changes SELECT $1, b.grade, b.record_id, b.group_id, m.group_id, b.family_id, m.family_id "
        f"FROM outdated_members b JOIN ({now}) m USING (grade, record_id) "
        "WHERE m.group_id <> b.group_id OR m.family_id <> b.family_id ORDER BY b.grade, b.record_id",
        [run_id],
    )
    connection.execute(f"DELETE FROM outdated_members WHERE record_id IN (SELECT record_id FROM {grouped})")
