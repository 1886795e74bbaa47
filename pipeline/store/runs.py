"""Runs: begun, resumed after a kill, and ended, each step a transaction."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import duckdb

from .. import __version__
from ..errors import UsageError
from .rows import one_number, one_row
from .transaction import transaction


@dataclass(frozen=True, slots=True)
class Run:
    """A run that is under way."""

    run_id: int
    resumed: bool
    """True where an interrupted run with the same arguments and inputs is taken up again."""


def begin_run(
    connection: duckdb.DuckDBPyConnection,
    command: str,
    arguments: dict[str, Any],
    plan_hash: str,
    settings: dict[str, Any],
    recomputes: bool = False,
) -> Run:
    """Take up the unfinished run of the same plan, or begin a new one (an unfinished other one is then closed).

    recomputes: until the run ends the store holds rows of two settings, so no other run may begin before it is taken
    up and ended (UsageError).
    """
    with transaction(connection):
        halfway = one_row(connection, "SELECT value FROM store_facts WHERE name = 'recomputing'")
        if halfway is not None and halfway[0] != plan_hash:
            raise UsageError(
                "A recomputation of this store was interrupted, and its rows are of two settings until it is done. "
                "Give the same command with the same settings and --recompute again."
            )
        open_run = one_row(
            connection, "SELECT run_id, plan_hash FROM runs WHERE status = 'running' ORDER BY run_id DESC LIMIT 1"
        )
        if open_run is not None and open_run[1] == plan_hash:
            return Run(int(open_run[0]), True)
        connection.execute("UPDATE runs SET status = 'interrupted' WHERE status = 'running'")
        connection.execute("DELETE FROM seen")
        run_id = 1 + one_number(connection, "SELECT max(run_id) FROM runs")
        connection.execute(
            "INSERT INTO runs VALUES (?, ?, ?, ?, 'running', now() AT TIME ZONE 'UTC', NULL, ?, ?, NULL)",
            [run_id, command, json.dumps(arguments, sort_keys=True), plan_hash, __version__,
             json.dumps(settings, sort_keys=True)],
        )  # fmt: skip
        if recomputes and halfway is None:
            connection.execute("INSERT INTO store_facts VALUES ('recomputing', ?)", [plan_hash])
    return Run(run_id, False)


def end_run(connection: duckdb.DuckDBPyConnection, run: Run, counts: dict[str, Any]) -> None:
    """Close a run with what it did; inside the caller's transaction where there is one."""
    connection.execute(
        "UPDATE runs SET status = 'done', ended_at = now() AT TIME ZONE 'UTC', counts = ? WHERE run_id = ?",
        [json.dumps(counts, sort_keys=True), run.run_id],
    )
    connection.execute("DELETE FROM store_facts WHERE name = 'recomputing'")
