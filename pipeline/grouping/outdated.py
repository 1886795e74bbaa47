"""What was grouped of compositions that have changed: taken out of what is published, and kept until `group` comes.

Members are kept to tell how ids change; matches, where the list of a composition is complete, to be taken over where
only records were added since (additions.py). A run that groups before it publishes leaves both where they are.
"""

from __future__ import annotations

import duckdb

from ..ingest.touched import settings_changed
from ..settings import Settings
from ..store.rows import one_number
from .digest import digest_compositions

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

LISTED = (
    "SELECT composition, run_id, records, most_candidates, close_pairs FROM grouped_compositions "
    f"WHERE composition NOT IN ({PINNED})"
)
"""Query of the grouped compositions whose lists of matches tell of every pair, but of those of two records in
`more_matches`."""

COMPLETE = (
    f"{LISTED} AND composition NOT IN "
    "(SELECT composition FROM records WHERE record_id IN (SELECT record_id FROM more_matches))"
)
"""Query of those whose lists of matches are complete, as `outdated_compositions` has them."""


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
            f"INSERT INTO outdated_compositions SELECT * FROM ({COMPLETE}) WHERE composition IN {compositions} "
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
