"""Pins: a curator's word on single records, kept until it is removed. They hold through every later run.

`keep R`: R is the kept record of its group. `apart R S`: R and S are two crystals, whatever was measured. `together R
S`: R and S are one crystal; they have to match in the window, though not at the grade.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import duckdb

from ..errors import UsageError
from ..ingest.withdraw import user_name
from ..store.find import find_record
from ..store.rows import one_row

KINDS = {"keep": 1, "apart": 2, "together": 2}
"""Kinds of pins and how many records each names."""


def set_pin(
    connection: duckdb.DuckDBPyConnection, run_id: int, kind: str, records: Sequence[str], reason: str
) -> dict[str, Any]:
    """Set a pin on records (ids or SOURCE:LABEL); inside the caller's transaction.

    Raises UsageError: no reason, another number of records, one record twice, two compositions for `together`, or a pin
    that holds already.
    """
    if not reason.strip():
        raise UsageError("A pin needs a reason: give --reason TEXT.")
    if len(records) != KINDS[kind]:
        raise UsageError(f"pin {kind} names {KINDS[kind]} record{'s' if KINDS[kind] > 1 else ''}, not {len(records)}.")
    ids = sorted(find_record(connection, text) for text in records)
    if len(set(ids)) != len(ids):
        raise UsageError(f"pin {kind} needs two different records.")
    if kind == "together":
        compositions = {
            composition
            for (composition,) in connection.execute(
                "SELECT composition FROM records WHERE list_contains(?, record_id)", [ids]
            ).fetchall()
        }
        if len(compositions) > 1:
            raise UsageError(f"{records[0]} and {records[1]} have different compositions: they cannot be one crystal.")
    held = _pin_on(connection, kind, ids)
    if held is not None:
        raise UsageError(f"Pin {held[0]} says so already ({held[1]}).")
    number = _add(connection, run_id, kind, ids, reason)
    return {"pin": number, "kind": kind, "records": ids, "reason": reason}


def remove_pin(connection: duckdb.DuckDBPyConnection, run_id: int, number: int) -> dict[str, Any]:
    """Remove a pin by its number; inside the caller's transaction. Raises UsageError where none holds."""
    row = one_row(connection, "SELECT kind FROM pins_in_force WHERE pin_id = ?", [number])
    if row is None:
        raise UsageError(f"No pin with the number {number} holds; `pin list` shows those that do.")
    connection.execute("UPDATE pins SET removed_by_run = ? WHERE pin_id = ?", [run_id, number])
    return {"pin": number, "kind": row[0], "removed": True}


def listed_pins(connection: duckdb.DuckDBPyConnection) -> list[dict[str, Any]]:
    """The pins that hold, in order, each with the names of its records. Read-only."""
    rows = connection.execute(
        "SELECT p.pin_id, p.kind, p.reason, p.made_by, strftime(p.made_at, '%Y-%m-%d'), p.record_id, a.source, a.file, "
        "a.label, p.other_record_id, b.source, b.file, b.label, f.pin_id IS NOT NULL FROM pins_in_force p "
        "JOIN records a ON a.record_id = p.record_id LEFT JOIN records b ON b.record_id = p.other_record_id "
        "LEFT JOIN refused_pins f ON f.pin_id = p.pin_id ORDER BY p.pin_id"
    ).fetchall()
    out = []
    for pin, kind, reason, by, day, *rest, refused in rows:
        ends = [dict(zip(("record_id", "source", "file", "label"), rest[i : i + 4], strict=True)) for i in (0, 4)]
        records = [end for end in ends if end["record_id"] is not None]
        out.append(
            {"pin": pin, "kind": kind, "reason": reason, "by": by, "day": day, "refused": refused, "records": records}
        )
    return out


def add_pins(
    connection: duckdb.DuckDBPyConnection, run_id: int, pins: Sequence[tuple[str, tuple[str, ...], str]]
) -> dict[str, Any]:
    """Set pins (kind, record ids, reason) from a file; those that hold already are passed over. Inside the caller's
    transaction; UsageError names the records that the store does not have."""
    ids = sorted({record for _, records, _ in pins for record in records})
    known = {
        record
        for (record,) in connection.execute(
            "SELECT record_id FROM records WHERE list_contains(?, record_id)", [ids]
        ).fetchall()
    }
    unknown = [record for record in ids if record not in known]
    if unknown:
        told = ", ".join(unknown[:10]) + (" ..." if len(unknown) > 10 else "")
        raise UsageError(f"The store does not have {len(unknown)} of the pinned records: {told}. No pin was set.")
    added = 0
    for kind, records, reason in pins:
        if _pin_on(connection, kind, sorted(records)) is None:
            _add(connection, run_id, kind, sorted(records), reason)
            added += 1
    return {"added": added, "known": len(pins) - added}


def undo_pins(connection: duckdb.DuckDBPyConnection, run_id: int, of_run: int) -> int:
    """Remove the pins that a run set, and set those again that it removed; returns how many."""
    rows = connection.execute(
        "SELECT kind, record_id, other_record_id, reason FROM pins WHERE removed_by_run = ? ORDER BY pin_id", [of_run]
    ).fetchall()
    count = len(
        connection.execute("SELECT pin_id FROM pins_in_force WHERE run_id = ? ORDER BY pin_id", [of_run]).fetchall()
    )
    connection.execute(
        "UPDATE pins SET removed_by_run = ? WHERE removed_by_run IS NULL AND run_id = ?", [run_id, of_run]
    )
    for kind, record, other, reason in rows:
        ids = [record] if other is None else [record, other]
        if _pin_on(connection, kind, ids) is None:
            _add(connection, run_id, kind, ids, reason)
            count += 1
    return count


def _pin_on(connection: duckdb.DuckDBPyConnection, kind: str, ids: list[str]) -> tuple[Any, ...] | None:
    return one_row(
        connection,
        "SELECT pin_id, reason FROM pins_in_force WHERE kind = ? AND record_id = ? "
        "AND other_record_id IS NOT DISTINCT FROM ?",
        [kind, ids[0], ids[1] if len(ids) > 1 else None],
    )


def _add(connection: duckdb.DuckDBPyConnection, run_id: int, kind: str, ids: list[str], reason: str) -> int:
    row = one_row(connection, "SELECT coalesce(max(pin_id), 0) + 1 FROM pins")
    number = int(row[0]) if row else 1
    connection.execute(
        "INSERT INTO pins VALUES (?, ?, ?, ?, ?, ?, now() AT TIME ZONE 'UTC', ?, NULL)",
        [number, kind, ids[0], ids[1] if len(ids) > 1 else None, reason, run_id, user_name()],
    )
    return number
