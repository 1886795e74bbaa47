"""Which compositions changed since their groups were last brought up to date.

Records of equal content, of one key, or that match have one composition: what happens to a record concerns the groups
of its composition alone. Each thing that can happen is noted with the number of its run, so that the compositions are
found from the store whatever was interrupted in between, and a night costs what arrived.
"""

from __future__ import annotations

import duckdb

from ..settings import Settings
from ..store.rows import one_row
from ..store.stages import changed_stages

STAGES = ("canonical", "verify", "keep")
"""Stages whose settings decide keys, ranks and groups: where one changed, every composition did."""

_SINCE = """
    SELECT composition FROM records WHERE changed_run > $since
    UNION SELECT composition FROM record_versions WHERE ended_by_run > $since
    UNION SELECT r.composition FROM records r JOIN withdrawals w ON w.record_id = r.record_id
        WHERE w.run_id > $since OR w.undone_by_run > $since
    UNION SELECT r.composition FROM records r JOIN withdrawals w ON w.source = r.source
        WHERE w.run_id > $since OR w.undone_by_run > $since
    UNION SELECT r.composition FROM records r JOIN pins p ON p.record_id = r.record_id
        WHERE p.run_id > $since OR p.removed_by_run > $since
    UNION SELECT r.composition FROM records r JOIN pins p ON p.other_record_id = r.record_id
        WHERE p.run_id > $since OR p.removed_by_run > $since
"""

_ALL = """
    SELECT composition FROM records
    UNION SELECT composition FROM record_versions
    UNION SELECT composition FROM grouped_compositions
"""


EXACT, COMPARED = "exact_until", "grouped_until"
"""Names of the facts that say up to which run the groups of equal content and key, and those of matches, are those of
the records, or are known to wait for `group`."""


def find_touched(connection: duckdb.DuckDBPyConnection, settings: Settings, fact: str = COMPARED) -> None:
    """Make the temporary table `touched` (composition): those of records, earlier versions, withdrawals and pins of
    runs after the one that a fact tells; all where a setting of STAGES changed."""
    since = grouped_until(connection, fact)
    if since is None or settings_changed(connection, settings):
        connection.execute(f"CREATE OR REPLACE TEMP TABLE touched AS {_ALL}")
    else:
        connection.execute(f"CREATE OR REPLACE TEMP TABLE touched AS {_SINCE}", {"since": since})


def grouped_until(connection: duckdb.DuckDBPyConnection, fact: str = COMPARED) -> int | None:
    """The run that a fact tells, None before the first. Read-only."""
    row = one_row(connection, "SELECT value FROM store_facts WHERE name = ?", [fact])
    return None if row is None else int(row[0])


def note_grouped(connection: duckdb.DuckDBPyConnection, run_id: int, fact: str = COMPARED) -> None:
    """Note that groups are up to date with this run; inside the caller's transaction."""
    connection.execute("DELETE FROM store_facts WHERE name = ?", [fact])
    connection.execute("INSERT INTO store_facts VALUES (?, ?)", [fact, str(run_id)])


def settings_changed(connection: duckdb.DuckDBPyConnection, settings: Settings) -> bool:
    """True where the groups of the store were made with other settings. Read-only."""
    return not changed_stages(connection, settings).keys().isdisjoint(STAGES)
