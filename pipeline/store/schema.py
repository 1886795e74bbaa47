"""Numbered schema steps from sql/migrations/, each applied together with the record of it."""

from __future__ import annotations

from functools import cache
from importlib.resources import files

import duckdb

from .rows import one_number
from .transaction import transaction


@cache
def migrations() -> tuple[tuple[int, str, str], ...]:
    """(number, file name, SQL) of every step, in order. Numbers count up from 1 without a gap."""
    found = []
    for entry in (files("lattice_census.sql") / "migrations").iterdir():
        if entry.name.endswith(".sql"):
            found.append((int(entry.name.split("_")[0]), entry.name, entry.read_text(encoding="utf-8")))
    found.sort()
    if [number for number, _, _ in found] != list(range(1, len(found) + 1)):
        raise RuntimeError("the numbers of the schema steps have a gap")
    return tuple(found)


def known_version() -> int:
    """The newest schema step that this installation knows."""
    return migrations()[-1][0]


def stored_version(connection: duckdb.DuckDBPyConnection) -> int | None:
    """The newest step applied to a store; None where the file is no store. Read-only."""
    present = one_number(
        connection, "SELECT count(*) FROM duckdb_tables() WHERE table_name = 'schema_migrations' AND NOT internal"
    )
    return one_number(connection, "SELECT max(version) FROM schema_migrations") if present else None


def migrate(connection: duckdb.DuckDBPyConnection) -> int:
    """Apply the missing steps and return their number; nothing to do is a no-op."""
    applied = 0
    have = stored_version(connection)
    if have is None:
        connection.execute(
            "CREATE TABLE schema_migrations (version INTEGER, name VARCHAR, applied_at TIMESTAMP);"
            "COMMENT ON TABLE schema_migrations IS "
            "'One row a step of the schema that was applied, written in the transaction of the step.';"
            "COMMENT ON COLUMN schema_migrations.version IS 'Number of the migration file.';"
            "COMMENT ON COLUMN schema_migrations.name IS 'Name of the migration file.';"
            "COMMENT ON COLUMN schema_migrations.applied_at IS 'When, UTC.';"
        )
        have = 0
    for number, name, sql in migrations():
        if number <= have:
            continue
        with transaction(connection):
            connection.execute(sql)
            connection.execute("INSERT INTO schema_migrations VALUES (?, ?, now() AT TIME ZONE 'UTC')", [number, name])
        applied += 1
    return applied
