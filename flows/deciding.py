"""Acts of the curator, each a run of its own: withdraw and undo."""

from __future__ import annotations

import uuid
from collections.abc import Callable
from pathlib import Path
from typing import Any

import duckdb

from lattice_census.grouping.exact import group_exact
from lattice_census.grouping.stage import group_records, set_outdated_aside
from lattice_census.ingest.pool import WorkerPool
from lattice_census.ingest.progress import Silent, call_directly
from lattice_census.ingest.withdraw import undo_withdrawals
from lattice_census.ingest.withdraw import withdraw as note_withdrawal
from lattice_census.output.findings import find_all
from lattice_census.settings import Settings
from lattice_census.store.runs import begin_run, end_run
from lattice_census.store.stages import stored_settings
from lattice_census.store.workspace import Workspace

from .ingest import finish


def withdraw(store: Path, what: str, reason: str, wait: float = 0.0) -> dict[str, Any]:
    """Withdraw a source or record, group anew, publish."""
    return _act(store, "withdraw", {"what": what, "reason": reason}, wait,
                lambda connection, run: note_withdrawal(connection, run, what, reason))  # fmt: skip


def undo(store: Path, what: str, wait: float = 0.0) -> dict[str, Any]:
    """Take withdrawals back, group anew, publish."""
    return _act(store, "undo", {"what": what}, wait, lambda connection, run: undo_withdrawals(connection, run, what))


def _act(
    store: Path,
    command: str,
    arguments: dict[str, Any],
    wait: float,
    act: Callable[[duckdb.DuckDBPyConnection, int], dict[str, Any]],
) -> dict[str, Any]:
    """Do the act in one transaction, then bring groups and findings up to date, then publish."""
    with Workspace(store, command, wait, must_exist=True) as workspace:
        connection = workspace.connection
        settings = Settings.model_validate(stored_settings(connection))
        # An act is never resumed: it is one transaction, so its plan hash is its own.
        run = begin_run(connection, command, arguments, uuid.uuid4().hex, settings.model_dump(mode="json"))
        connection.execute("BEGIN")
        try:
            done = act(connection, run.run_id)
            group_exact(connection, run.run_id, settings)
            waiting = set_outdated_aside(connection, settings)
            connection.execute("COMMIT")
        except BaseException:
            connection.execute("ROLLBACK")
            connection.execute("DELETE FROM runs WHERE run_id = ?", [run.run_id])
            raise
        if waiting:
            with WorkerPool(1) as pool:
                group_records(workspace, run.run_id, settings, pool, Silent())
        connection.execute("BEGIN")
        try:
            find_all(connection, settings)
            end_run(connection, run, done)
            connection.execute("COMMIT")
        except BaseException:
            connection.execute("ROLLBACK")
            raise
        finish(workspace, call_directly)
    return {"run": run.run_id, **done}
