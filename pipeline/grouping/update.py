"""Groups brought up to date with the records, as far as that needs no comparison."""

from __future__ import annotations

import duckdb

from ..ingest.touched import COMPARED, EXACT, find_touched, find_touched_keys, note_grouped, settings_changed
from ..settings import Settings
from ..store.rows import one_number
from ..store.transaction import transaction
from .exact import group_exact
from .outdated import GROUPED, WAITING, set_outdated_aside
from .rank import rank_records

TOUCHED = "SELECT count(*) FROM touched"


def update_exact_groups(connection: duckdb.DuckDBPyConnection, run_id: int, settings: Settings) -> None:
    """Make the groups of equal content and key anew where records changed; inside the caller's transaction."""
    find_touched_keys(connection, settings, EXACT)
    if one_number(connection, "SELECT count(*) FROM touched_keys"):
        rank_records(connection, settings, "touched_keys", "record_id")
        group_exact(connection, run_id)
        note_grouped(connection, run_id, EXACT)


def update_groups(
    connection: duckdb.DuckDBPyConnection, run_id: int, settings: Settings, compared: bool = False
) -> int:
    """Make the groups of equal content and key anew where records changed, and set what `group` must compare again
    aside. Inside the caller's transaction. Returns the number of compositions that wait for `group`, once any was
    grouped.

    compared: `group` has just compared what was to be compared, or will before anything else is done or published;
    in the second case the run is noted when it has.
    """
    update_exact_groups(connection, run_id, settings)
    if compared and not settings_changed(connection, settings):
        return 0
    find_touched(connection, settings, COMPARED)
    if not one_number(connection, TOUCHED):
        return one_number(connection, WAITING) if one_number(connection, GROUPED) else 0
    rank_records(connection, settings, "touched")
    waiting = set_outdated_aside(connection, settings)
    note_grouped(connection, run_id)
    return waiting


def settle_groups(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """`update_groups` in a transaction of its own, for what an interrupted run left."""
    with transaction(connection):
        update_groups(connection, one_number(connection, "SELECT max(run_id) FROM runs"), settings)
