"""Structures as they came, from the store."""

from __future__ import annotations

from typing import Any

import duckdb
import numpy as np
import polars as pl


def given_structures(
    connection: duckdb.DuckDBPyConnection, records: pl.DataFrame, table: str = "structures"
) -> list[tuple[np.ndarray[Any, Any], list[str], np.ndarray[Any, Any]]]:
    """(cell (3, 3) in angstrom, tokens, positions (n, 3) fractional) of each record, in order, as they came.

    table: one with the columns of `structures`.
    """
    connection.register("wanted", records.select("record_id").with_row_index("place").to_arrow())
    try:
        rows = connection.sql(
            "SELECT s.cell_angstrom, s.species, s.positions_fractional "
            f"FROM wanted w JOIN {table} s USING (record_id) ORDER BY w.place"
        ).fetchall()
    finally:
        connection.unregister("wanted")
    return [(np.array(c).reshape(3, 3), list(s), np.array(p).reshape(-1, 3)) for c, s, p in rows]
