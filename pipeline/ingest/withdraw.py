"""Taking a source or a record out of every later result, and taking that back. Nothing is deleted."""

from __future__ import annotations

import getpass
from typing import Any

import duckdb

from ..errors import UsageError
from ..store.find import find_record
from ..store.rows import one_number, one_row

NOT_CURRENT = (
    "(SELECT record_id, composition FROM records WHERE missing_since_run IS NOT NULL "
    "UNION SELECT r.record_id, r.composition FROM records r JOIN withdrawals w USING (record_id) "
    "WHERE w.undone_by_run IS NULL "
    "UNION SELECT r.record_id, r.composition FROM records r JOIN withdrawals w USING (source) "
    "WHERE w.undone_by_run IS NULL)"
)
"""Query of the records that `current_records` leaves out: few, so that it is cheaper than all those that it holds."""


def withdraw(connection: duckdb.DuckDBPyConnection, run_id: int, what: str, reason: str) -> dict[str, Any]:
    """Note the withdrawal of a source (by name) or a record (by id or source:label); inside the caller's transaction.

    Raises UsageError where nothing is named so, or it is withdrawn already.
    """
    if not reason.strip():
        raise UsageError("A withdrawal needs a reason: give --reason TEXT.")
    is_source = one_row(connection, "SELECT 1 FROM sources WHERE source = ?", [what]) is not None
    source = what if is_source else None
    record = None if is_source else find_record(connection, what)
    held = one_row(
        connection,
        "SELECT withdrawal_id, reason FROM withdrawals WHERE undone_by_run IS NULL "
        "AND source IS NOT DISTINCT FROM ? AND record_id IS NOT DISTINCT FROM ?",
        [source, record],
    )
    if held is not None:
        raise UsageError(f"{what} is withdrawn already ({held[1]}).")
    connection.execute(
        "INSERT INTO withdrawals SELECT coalesce(max(withdrawal_id), 0) + 1, ?, ?, ?, ?, now() AT TIME ZONE 'UTC', ?, "
        "NULL FROM withdrawals",
        [source, record, reason, run_id, user_name()],
    )
    count = one_number(connection, "SELECT count(*) FROM records WHERE source = ? OR record_id = ?", [source, record])
    return {"withdrawn": count, "source": source, "record": record, "reason": reason}


def undo_withdrawals(connection: duckdb.DuckDBPyConnection, run_id: int, what: str) -> list[str]:
    """Take back the withdrawals of a run (by number), a source or a record; inside the caller's transaction.

    Returns the sources and records that are back; UsageError where no record is named so.
    """
    if what.isdigit() and len(what) < 20:
        condition, value = "run_id = ?", what
    elif one_row(connection, "SELECT 1 FROM sources WHERE source = ?", [what]):
        condition, value = "source = ?", what
    else:
        condition, value = "record_id = ?", find_record(connection, what)
    rows = connection.execute(
        "SELECT withdrawal_id, coalesce(source, record_id) FROM withdrawals "
        f"WHERE undone_by_run IS NULL AND {condition} ORDER BY withdrawal_id",
        [value],
    ).fetchall()
    connection.execute(
        f"UPDATE withdrawals SET undone_by_run = ? WHERE undone_by_run IS NULL AND {condition}", [run_id, value]
    )
    return [name for _, name in rows]


def user_name() -> str:
    """The login name, for the ledger; `unknown` where the system has none."""
    try:
        return getpass.getuser()
    except (KeyError, OSError):
        return "unknown"
