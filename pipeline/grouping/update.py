"""Groups brought up to date with the records, as far as that needs no comparison."""

from __future__ import annotations

import duckdb

from ..ingest.touched import find_touched, note_grouped
from ..settings import Settings
from ..store.rows import one_number
from .exact import group_exact
from .outdated import GROUPED, WAITING, set_outdated_aside
from .rank import rank_records


def update_groups(connection: duckdb.DuckDBPyConnection, run_id: int, settings: Settings) -> int:
    """Make the groups of equal content and key anew where records changed, and set what `group` must compare again
    aside. Inside the caller's transaction. Returns the number of compositions that wait for `group`, once any was
    grouped.
    """
    find_touched(connection, settings)
    if not one_number(connection, "SELECT count(*) FROM touched"):
        return one_number(connection, WAITING) if one_number(connection, GROUPED) else 0
    rank_records(connection, settings, "touched")
    group_exact(connection, run_id)
    waiting = set_outdated_aside(connection, settings)
    note_grouped(connection, run_id)
    return waiting
