"""Whether the groups of a store are those of its records as they are now.

A run looks only at compositions whose records it knows to have changed. Here the ranks of all records and the digests
of all compositions are made anew and compared with what stands in the store.
"""

from __future__ import annotations

import duckdb

from ..grouping.digest import digest_compositions
from ..grouping.rank import rank_records
from ..settings import Settings
from ..store.stages import stored_settings


def changed_since_grouped(connection: duckdb.DuckDBPyConnection) -> list[tuple[str, int]]:
    """(composition, records) of every grouped composition whose records, keys, ranks or pins are others than those it
    was grouped from. Read-only."""
    settings = Settings.model_validate(stored_settings(connection))
    connection.execute("CREATE OR REPLACE TEMP TABLE all_grouped AS SELECT composition FROM grouped_compositions")
    rank_records(connection, settings)
    digest_compositions(connection, settings, "all_grouped")
    return connection.execute("SELECT composition, records FROM changed_compositions ORDER BY composition").fetchall()


def kept_out_of_order(connection: duckdb.DuckDBPyConnection) -> list[tuple[str, str, str]]:
    """(grade, kept record, record that comes before it) of every group of equal content or key, without pins, that does
    not keep its best record. Read-only, after the temporary view `pinned` was made."""
    rank_records(connection, Settings.model_validate(stored_settings(connection)))
    return connection.execute(
        "SELECT m.grade, m.group_id, min_by(m.record_id, k.rank) AS best FROM members m JOIN ranks k USING (record_id) "
        "WHERE m.grade IN ('copy', 'key') AND m.group_id IN (SELECT group_id FROM members WHERE NOT kept) "
        "GROUP BY m.grade, m.group_id HAVING best <> m.group_id "
        "AND count(*) FILTER (m.record_id IN (SELECT record_id FROM pinned)) = 0 ORDER BY m.grade, m.group_id"
    ).fetchall()
