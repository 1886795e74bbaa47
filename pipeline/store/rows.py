"""Single rows and numbers of a query, with the result fetched to its end.

DuckDB 2 refuses other work on a connection while a result is not fetched to its end, as `fetchone` leaves it.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import duckdb


def one_row(connection: duckdb.DuckDBPyConnection, sql: str, values: Sequence[object] = ()) -> tuple[Any, ...] | None:
    """The first row of a query, or None."""
    rows = connection.execute(sql, list(values)).fetchall()
    return rows[0] if rows else None


def one_number(connection: duckdb.DuckDBPyConnection, sql: str, values: Sequence[object] = ()) -> int:
    """The whole number that a query gives; 0 where it gives no row or NULL."""
    row = one_row(connection, sql, values)
    return int(row[0]) if row and row[0] is not None else 0
