"""The tables and views of a store with their comments, as the store itself holds them."""

from __future__ import annotations

from typing import Any

import duckdb

from .tables import safe


def schema_of(connection: duckdb.DuckDBPyConnection) -> list[dict[str, Any]]:
    """Every table and view of the store with its comment and its columns (name, type, comment). Read-only."""
    about = connection.execute(
        "SELECT table_name, 'table', comment FROM duckdb_tables() WHERE NOT internal AND database_name = "
        "current_database() UNION ALL SELECT view_name, 'view', comment FROM duckdb_views() WHERE NOT internal AND "
        "database_name = current_database() ORDER BY 1"
    ).fetchall()
    columns = connection.execute(
        "SELECT table_name, column_name, data_type, comment FROM duckdb_columns() WHERE NOT internal AND "
        "database_name = current_database() ORDER BY table_name, column_index"
    ).fetchall()
    of_table: dict[str, dict[tuple[str, str], str]] = {}
    for table, name, kind, meaning in columns:
        of_table.setdefault(table, {})[(name, kind)] = meaning
    tables = [name for name, kind, _ in about if kind == "table"]
    out = []
    for table, kind, comment in about:
        listed = [
            {
                "name": name,
                "type": type_,
                "meaning": meaning or _of_view((name, type_), of_table[table], tables, of_table),
            }
            for (name, type_), meaning in of_table[table].items()
        ]
        out.append({"name": table, "kind": kind, "meaning": comment, "columns": listed})
    return out


def _of_view(
    column: tuple[str, str],
    view: dict[tuple[str, str], str],
    tables: list[str],
    of_table: dict[str, dict[tuple[str, str], str]],
) -> str | None:
    """The meaning of a column of a view that has no comment of its own: that of the table which holds every column of
    the view, else what all tables with such a column agree on."""
    whole = [t for t in tables if view.keys() <= of_table[t].keys()]
    meanings = {of_table[t][column] for t in (whole or tables) if of_table[t].get(column)}
    return meanings.pop() if len(meanings) == 1 else None


def schema_text(found: list[dict[str, Any]]) -> str:
    """The result of `schema_of` as plain text."""
    parts = []
    for entry in found:
        lines = [f"{entry['name']} ({entry['kind']}): {safe(entry['meaning'] or '')}".rstrip(": ")]
        width = max(len(c["name"]) for c in entry["columns"])
        kinds = max(len(c["type"]) for c in entry["columns"])
        for c in entry["columns"]:
            lines.append(f"    {c['name']:<{width}}  {c['type']:<{kinds}}  {safe(c['meaning'] or '')}".rstrip())
        parts.append("\n".join(lines))
    return "\n\n".join(parts)
