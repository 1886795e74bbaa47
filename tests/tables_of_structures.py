"""Small tables of structures for tests that do not care which crystals they hold, and ways to look into a store."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

import duckdb
import numpy as np

from lattice_census.output.cif import cif_text

from . import strategies


def crystals(count: int, seed: int = 1, sites: int = 4) -> list[strategies.Crystal]:
    """So many different crystals."""
    rng = np.random.default_rng(seed)
    kinds = strategies.LATTICE_TYPES
    return [strategies.random_crystal(rng, kinds[i % len(kinds)], sites) for i in range(count)]


def text_of(crystal: strategies.Crystal, name: str = "x") -> str:
    """A crystal as CIF text."""
    cell, positions, tokens = crystal
    return cif_text(cell, positions, tokens, name=name)


def rows_of(listed: list[strategies.Crystal]) -> list[dict[str, Any]]:
    """Rows of a table: material_id, cif, energy_per_atom, batch."""
    return [
        {"material_id": f"m-{i:05d}", "cif": text_of(c, f"m{i}"), "energy_per_atom": -1.5 - i / 1000, "batch": i % 3}
        for i, c in enumerate(listed)
    ]


def write_csv(path: Path, rows: list[dict[str, Any]]) -> Path:
    """The rows as a CSV file."""
    with path.open("w", newline="", encoding="utf-8") as f:
        writer = csv.DictWriter(f, list(rows[0]))
        writer.writeheader()
        writer.writerows(rows)
    return path


RUN_COLUMNS = {
    "runs": {"run_id", "started_at", "ended_at"},
    "store_facts": set(),
    "schema_migrations": {"applied_at"},
}


def whole_store(path: Path) -> dict[str, list[tuple[Any, ...]]]:
    """Every row of every table, sorted, without run ids and times (and the store's own id)."""
    connection = duckdb.connect(str(path), read_only=True)
    try:
        tables = [
            t for (t,) in connection.execute("SELECT table_name FROM duckdb_tables() WHERE NOT internal").fetchall()
        ]
        out = {}
        for table in sorted(tables):
            columns = [
                c
                for (c,) in connection.execute(
                    "SELECT column_name FROM duckdb_columns() WHERE table_name = ? ORDER BY column_index", [table]
                ).fetchall()
                if not (c.endswith("run") or c in ("run_id", "started_at", "ended_at", "applied_at", "made_at"))
            ]
            where = "WHERE name <> 'store_id'" if table == "store_facts" else ""
            rows = connection.execute(f"SELECT {', '.join(columns)} FROM {table} {where}").fetchall()
            out[table] = sorted(rows, key=repr)
        return out
    finally:
        connection.close()


def query(path: Path, sql: str, *values: Any) -> list[tuple[Any, ...]]:
    """Rows of a query on a store."""
    connection = duckdb.connect(str(path), read_only=True)
    try:
        return connection.execute(sql, list(values)).fetchall()
    finally:
        connection.close()
