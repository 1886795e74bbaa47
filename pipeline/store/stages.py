"""Rows of two settings are never mixed: each stage's settings are kept with its rows and compared before a run."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import duckdb

from ..errors import StoreError, UsageError
from ..settings import STAGES, Settings
from .connect import open_for_reading


def stored_settings(connection: duckdb.DuckDBPyConnection) -> dict[str, Any]:
    """The stage settings that the rows of a store were computed with; {} for an empty store. Read-only."""
    rows = connection.execute("SELECT name, value FROM stage_settings").fetchall()
    return {name: json.loads(value) for name, value in rows}


def changed_stages(connection: duckdb.DuckDBPyConnection, settings: Settings) -> dict[str, list[str]]:
    """For each stage whose stored settings differ: lines `name: stored -> asked for`, in the order of the stages."""
    stored = stored_settings(connection)
    out: dict[str, list[str]] = {}
    for stage in STAGES:
        lines = [
            f"{name}: {stored[name]} -> {value}"
            for name, value in settings.of_stage(stage).items()
            if name in stored and stored[name] != value
        ]
        if lines:
            out[stage] = lines
    return out


def refuse_mixed(connection: duckdb.DuckDBPyConnection, settings: Settings, stages: tuple[str, ...]) -> None:
    """Raise UsageError where one of the stages was computed with other settings, saying what must be recomputed."""
    changed = {s: lines for s, lines in changed_stages(connection, settings).items() if s in stages}
    if not changed:
        return
    told = "; ".join(f"{stage} ({', '.join(lines)})" for stage, lines in changed.items())
    first = next(iter(changed))
    after = ", ".join(STAGES[STAGES.index(first) :])
    raise UsageError(
        f"The store was computed with other settings: {told}. Its stages {after} must be recomputed: "
        "give --recompute, or leave the setting as it is."
    )


def record_settings(connection: duckdb.DuckDBPyConnection, settings: Settings, stages: tuple[str, ...]) -> None:
    """Keep the settings of the stages as those of the rows that are written from now on."""
    for stage in stages:
        connection.execute("DELETE FROM stage_settings WHERE stage = ?", [stage])
        for name, value in settings.of_stage(stage).items():
            connection.execute("INSERT INTO stage_settings VALUES (?, ?, ?)", [stage, name, json.dumps(value)])


def settings_of_store(published: Path) -> dict[str, Any]:
    """The stage settings of a store by its published file, {} where there is none yet. Read-only.

    They stand in `settings.json` of the work folder too, so that they are known while a reader elsewhere has the file
    locked.
    """
    beside = published.with_name(published.name + ".work") / "settings.json"
    if beside.exists():
        try:
            found = json.loads(beside.read_text(encoding="utf-8"))
        except ValueError as error:
            raise StoreError(f"{beside} is damaged: remove it and give the command again.") from error
        return dict(found)
    if not published.exists():
        return {}
    connection = open_for_reading(published)
    try:
        return stored_settings(connection)
    finally:
        connection.close()
