"""What the shell completes: names of questions, grades, sources. An error is silence: nobody asked for a message."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

import typer  # typer reads the annotations below when it runs

if TYPE_CHECKING:
    from collections.abc import Callable

GRADES = ("copy", "key", "same", "near", "rescaled", "isotypic")


def question_names(incomplete: str) -> list[tuple[str, str]]:
    """Named questions with their sentences."""
    from lattice_census.output.questions import questions

    return [(name, q.sentence) for name, q in questions().items() if name.startswith(incomplete)]


def grades(incomplete: str) -> list[str]:
    """Grades, strictest first."""
    return [grade for grade in GRADES if grade.startswith(incomplete)]


def one_of(*words: str) -> Callable[[str], list[str]]:
    """A completion of a fixed list of words."""

    def complete(incomplete: str) -> list[str]:
        return [word for word in words if word.startswith(incomplete)]

    return complete


def source_names(ctx: typer.Context, incomplete: str) -> list[str]:
    """Sources of the store that the line names, or of the default one."""
    import duckdb

    store = ctx.params.get("store") or os.environ.get("LATTICE_CENSUS_STORE") or "census.duckdb"
    if not Path(str(store)).is_file():
        return []
    try:
        connection = duckdb.connect(str(store), read_only=True)
        rows = connection.execute(
            "SELECT source FROM sources WHERE starts_with(source, ?) ORDER BY source LIMIT 100", [incomplete]
        ).fetchall()
        connection.close()
    except duckdb.Error:
        return []
    return [source for (source,) in rows]
