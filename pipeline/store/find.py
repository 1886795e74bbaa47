"""From what a person types to a record or source: an id, or `source:label`."""

from __future__ import annotations

import re

import duckdb

from ..errors import UsageError
from .rows import one_row


def find_record(connection: duckdb.DuckDBPyConnection, text: str) -> str:
    """The record id that `text` names. Read-only. Raises UsageError; an ambiguous text lists the candidates."""
    if re.fullmatch(r"[0-9a-f]{20}", text):
        if one_row(connection, "SELECT 1 FROM records WHERE record_id = ?", [text]):
            return text
        raise UsageError(f"The store has no record with the id {text}.")
    source, colon, label = text.partition(":")
    if not colon:
        raise UsageError(f"{text!r} names no record: give a record id (20 hex digits) or SOURCE:LABEL.")
    rows = connection.execute(
        "SELECT record_id, file FROM records WHERE source = ? AND label = ? ORDER BY file, record_id LIMIT 21",
        [source, label],
    ).fetchall()
    if not rows:
        known = one_row(connection, "SELECT 1 FROM sources WHERE source = ?", [source])
        where = f"The source {source!r} has no record {label!r}." if known else f"The store has no source {source!r}."
        raise UsageError(where)
    if len(rows) > 1:
        lines = "\n".join(f"  {identity}  {source}:{label} in {file}" for identity, file in rows[:20])
        more = "\n  ..." if len(rows) > 20 else ""
        raise UsageError(f"{text!r} names several records; give the id of one:\n{lines}{more}")
    return str(rows[0][0])
