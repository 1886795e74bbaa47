"""The declared columns and the schema of sql/ agree, both ways, with their comments."""

from __future__ import annotations

import duckdb

from lattice_census.model.columns import TABLES, VIEWS
from lattice_census.store.schema import known_version, migrate, migrations, stored_version


def _store() -> duckdb.DuckDBPyConnection:
    connection = duckdb.connect()
    migrate(connection)
    return connection


def test_every_declared_table_and_column_is_in_the_store_and_no_other():
    rows = (
        _store()
        .execute(
            "SELECT table_name, column_name, data_type, comment FROM duckdb_columns() c "
            "WHERE NOT internal AND table_name IN (SELECT table_name FROM duckdb_tables()) "
            "ORDER BY table_name, column_index"
        )
        .fetchall()
    )
    declared = [(t, c.name, c.type, c.meaning) for t in sorted(TABLES) for c in TABLES[t].columns]
    assert rows == declared


def test_tables_and_views_carry_their_sentence():
    connection = _store()
    tables = dict(connection.execute("SELECT table_name, comment FROM duckdb_tables() WHERE NOT internal").fetchall())
    views = dict(connection.execute("SELECT view_name, comment FROM duckdb_views() WHERE NOT internal").fetchall())
    assert tables == {name: table.meaning for name, table in TABLES.items()}
    assert views == VIEWS


def test_quantities_name_their_unit():
    for table in TABLES.values():
        for column in table.columns:
            if column.type.startswith("DOUBLE"):
                units = (
                    "_angstrom", "_angstrom2_per_site", "_angstrom3_per_site", "_deg", "_fractional", "_ev_per_site",
                )  # fmt: skip
                dimensionless = ("rotation", "orthogonal", "volume_ratio", "value")
                assert column.name.endswith(units) or column.name in dimensionless or "strain" in column.name


def test_migrating_twice_is_a_no_op_and_a_failing_step_leaves_no_trace(monkeypatch):
    connection = _store()
    assert migrate(connection) == 0
    assert stored_version(connection) == known_version()
    broken = (*migrations(), (known_version() + 1, "999_broken.sql", "CREATE TABLE half (a INTEGER); SELECT nonsense;"))
    monkeypatch.setattr("lattice_census.store.schema.migrations", lambda: broken)
    try:
        migrate(connection)
    except duckdb.Error:
        pass
    else:
        raise AssertionError("the broken step went through")
    names = {t for (t,) in connection.execute("SELECT table_name FROM duckdb_tables()").fetchall()}
    assert "half" not in names
    assert stored_version(connection) == broken[-2][0]
