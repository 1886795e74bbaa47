"""Acts of the curator, each a run of its own: withdraw, undo, and pins."""

from __future__ import annotations

import re
import uuid
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import duckdb

from lattice_census.decisions.ledger import lapse, restore_ended, undo_decisions
from lattice_census.decisions.pins import add_pins, remove_pin, set_pin, undo_pins
from lattice_census.errors import UsageError
from lattice_census.grouping.stage import find_changed, group_records
from lattice_census.grouping.update import update_groups
from lattice_census.ingest.pool import WorkerPool
from lattice_census.ingest.progress import Silent, call_directly
from lattice_census.ingest.withdraw import undo_withdrawals
from lattice_census.ingest.withdraw import withdraw as note_withdrawal
from lattice_census.output.findings import find_all
from lattice_census.settings import Settings
from lattice_census.store.connect import open_for_reading
from lattice_census.store.rows import one_row
from lattice_census.store.runs import begin_run, end_run
from lattice_census.store.stages import stored_settings
from lattice_census.store.transaction import transaction
from lattice_census.store.workspace import Workspace

from .ingest import finish


def withdraw(store: Path, what: str, reason: str, wait: float = 0.0) -> dict[str, Any]:
    """Withdraw a source or record, group anew, publish."""
    _refuse_nameless(store, what, "a source or record")
    return _act(store, "withdraw", {"what": what, "reason": reason}, wait,
                lambda connection, run: note_withdrawal(connection, run, what, reason))  # fmt: skip


def undo(store: Path, what: str, wait: float = 0.0) -> dict[str, Any]:
    """Take back withdrawals, decisions and pins, group anew, publish.

    What a run that is taken back had superseded or let lapse is decided again in the same words.
    """
    run_given = int(what) if what.isdigit() and len(what) < 20 else None
    if run_given is None:
        _refuse_nameless(store, what, "a run, source or record")

    def act(connection: duckdb.DuckDBPyConnection, run: int) -> dict[str, Any]:
        restored = undo_withdrawals(connection, run, what)
        is_source = one_row(connection, "SELECT 1 FROM sources WHERE source = ?", [what]) is not None
        decisions = 0 if is_source else undo_decisions(connection, run, what)
        pins = undo_pins(connection, run, run_given) if run_given is not None else 0
        if not (restored or decisions or pins):
            raise UsageError(
                f"There is nothing to undo for {what}: no withdrawal, decision or pin of that run, record or source "
                "holds."
            )
        return {"restored": restored, "decisions": decisions, "pins": pins}

    def after(connection: duckdb.DuckDBPyConnection, run: int) -> dict[str, Any]:
        return {"decided_again": restore_ended(connection, run, run_given) if run_given is not None else 0}

    return _act(store, "undo", {"what": what}, wait, act, after)


def _refuse_nameless(store: Path, what: str, wanted: str) -> None:
    """UsageError for a text that can name nothing of what is wanted."""
    if ":" in what or re.fullmatch(r"[0-9a-f]{20}", what) or not store.is_file():
        return
    connection = open_for_reading(store)
    try:
        rows = connection.execute("SELECT source FROM sources ORDER BY source").fetchall()
    finally:
        connection.close()
    names = [name for (name,) in rows]
    if what not in names:
        raise UsageError(
            f"{what!r} names no {wanted.removeprefix('a ')}. A record is given by its id (20 hex digits) or as "
            f"SOURCE:LABEL; sources: {', '.join(names) or 'none'}."
        )


def pin(store: Path, kind: str, records: Sequence[str], reason: str, wait: float = 0.0) -> dict[str, Any]:
    """Set a pin, group anew, publish."""
    return _act(store, "pin", {"kind": kind, "records": list(records), "reason": reason}, wait,
                lambda connection, run: set_pin(connection, run, kind, records, reason))  # fmt: skip


def unpin(store: Path, number: int, wait: float = 0.0) -> dict[str, Any]:
    """Remove a pin, group anew, publish."""
    return _act(store, "pin", {"remove": number}, wait, lambda connection, run: remove_pin(connection, run, number))


def import_pins(store: Path, pins: Sequence[tuple[str, tuple[str, ...], str]], wait: float = 0.0) -> dict[str, Any]:
    """Set the pins of a file, group anew, publish."""
    return _act(store, "pin", {"import": len(pins)}, wait, lambda connection, run: add_pins(connection, run, pins))


def _act(
    store: Path,
    command: str,
    arguments: dict[str, Any],
    wait: float,
    act: Callable[[duckdb.DuckDBPyConnection, int], dict[str, Any]],
    after: Callable[[duckdb.DuckDBPyConnection, int], dict[str, Any]] = lambda connection, run: {},
) -> dict[str, Any]:
    """Do the act in one transaction, then bring groups, decisions and findings up to date, then publish.

    after: what is to be done once the groups are as the act leaves them.
    """
    with Workspace(store, command, wait, must_exist=True) as workspace:
        connection = workspace.connection
        settings = Settings.model_validate(stored_settings(connection))
        # An act is never resumed: it is one transaction, so its plan hash is its own.
        run = begin_run(connection, command, arguments, uuid.uuid4().hex, settings.model_dump(mode="json"))
        try:
            with transaction(connection):
                done = act(connection, run.run_id)
                waiting = update_groups(connection, run.run_id, settings)
        except BaseException:
            connection.execute("DELETE FROM runs WHERE run_id = ?", [run.run_id])
            raise
        if waiting:
            find_changed(connection, settings)
            with WorkerPool(1) as pool:
                group_records(workspace, run.run_id, settings, pool, Silent())
        with transaction(connection):
            lapse(connection, run.run_id)
            done |= after(connection, run.run_id)
            find_all(connection, settings)
            end_run(connection, run, done)
        finish(workspace, settings, call_directly)
    return {"run": run.run_id, **done}
