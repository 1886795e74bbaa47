"""What changed since groups were last brought up to date: compositions, and keys.

Records of equal content have one key, and records of one key, or that match, have one composition: what happens to a
record concerns the groups of its key and composition alone. Each thing that can happen is noted with the number of its
run, so that keys and compositions are found from the store whatever was interrupted in between, and a night costs what
arrived.
"""

from __future__ import annotations

import duckdb

from ..settings import Settings
from ..store.rows import one_row
from ..store.stages import changed_stages

STAGES = ("canonical", "fingerprint", "verify", "keep")
"""Stages whose settings decide keys, types, ranks and groups: where one changed, all keys and compositions did."""

_RECORDS = """
    SELECT record_id FROM records WHERE changed_run > $since
    UNION SELECT record_id FROM withdrawals WHERE run_id > $since OR undone_by_run > $since
    UNION SELECT r.record_id FROM records r JOIN withdrawals w USING (source)
        WHERE w.run_id > $since OR w.undone_by_run > $since
    UNION SELECT unnest([record_id, other_record_id]) FROM pins WHERE run_id > $since OR removed_by_run > $since
"""

_COMPOSITIONS = f"""
    SELECT composition FROM records WHERE record_id IN ({_RECORDS})
    UNION SELECT composition FROM record_versions WHERE ended_by_run > $since
"""

_ALL_COMPOSITIONS = """
    SELECT composition FROM records
    UNION SELECT composition FROM record_versions
    UNION SELECT composition FROM grouped_compositions
"""

_KEYS = f"""
    SELECT crystal_key FROM canonical_forms WHERE record_id IN ({_RECORDS})
    UNION SELECT crystal_key FROM record_versions WHERE ended_by_run > $since
"""


EXACT, COMPARED = "exact_until", "grouped_until"
"""Names of the facts that say up to which run the groups of equal content and key, and those of matches, are those of
the records, or are known to wait for `group`."""


def find_touched(connection: duckdb.DuckDBPyConnection, settings: Settings, fact: str = COMPARED) -> None:
    """Make the temporary table `touched` (composition): those of records, earlier versions, withdrawals and pins of
    runs after the one that a fact tells; all where a setting of STAGES changed."""
    since = _since(connection, settings, fact)
    query, values = (_ALL_COMPOSITIONS, None) if since is None else (_COMPOSITIONS, {"since": since})
    connection.execute(f"CREATE OR REPLACE TEMP TABLE touched AS {query}", values)


def find_touched_keys(connection: duckdb.DuckDBPyConnection, settings: Settings, fact: str = COMPARED) -> None:
    """Make the temporary table `touched_keys` (crystal_key, record_id) of the keys, chosen as `find_touched` chooses
    compositions: one row a record that has the key, also one that is missing or withdrawn; record_id is NULL where
    none has it any more."""
    since = _since(connection, settings, fact)
    if since is None:
        query, values = (
            "SELECT crystal_key, record_id FROM canonical_forms UNION ALL SELECT DISTINCT crystal_key, NULL "
            "FROM record_versions ANTI JOIN canonical_forms USING (crystal_key)",
            None,
        )
    else:
        query, values = (
            f"SELECT crystal_key, record_id FROM ({_KEYS}) LEFT JOIN canonical_forms USING (crystal_key)",
            {"since": since},
        )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE touched_keys AS {query}", values)


def _since(connection: duckdb.DuckDBPyConnection, settings: Settings, fact: str) -> int | None:
    """The run after which something must have happened to be looked at; None where everything is."""
    return None if settings_changed(connection, settings) else grouped_until(connection, fact)


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
