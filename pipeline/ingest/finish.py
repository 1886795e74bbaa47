"""The end of a source: its files' counts, the records that are gone, and the exact groups over all records."""

from __future__ import annotations

import json

import duckdb

from ..errors import WorkError
from ..store.rows import one_number, one_row
from ..store.transaction import transaction
from .scan import SourceToRead


def finish_source(
    connection: duckdb.DuckDBPyConnection, run_id: int, source: SourceToRead, found: dict[str, int]
) -> None:
    """Write the rows of `files` and `sources` and mark what is missing, in one transaction.

    found: raw records by file on disk, counted while reading. Raises WorkError where found <> accepted + rejected.
    """
    name = source.source
    with transaction(connection):
        for file in source.files:
            if not file.changed:
                continue
            inside = "(file = $2 OR starts_with(file, $2 || '/'))"
            accepted, rejected = (
                one_number(
                    connection, f"SELECT count(*) FROM {table} WHERE source = $1 AND {inside}", [name, file.file]
                )
                for table in ("seen", "rejects")
            )
            if accepted + rejected != found[file.file]:
                raise WorkError(
                    f"{file.path}: {found[file.file]} records found, but {accepted} accepted and {rejected} refused. "
                    "This is a fault of lattice-census; nothing was published."
                )
            connection.execute("DELETE FROM files WHERE source = ? AND file = ?", [name, file.file])
            connection.execute(
                "INSERT INTO files VALUES (?, ?, ?, ?, ?, ?, ?, NULL, ?)",
                [name, file.file, file.sha256, file.size, found[file.file], accepted, rejected, run_id],
            )
            connection.execute(
                f"UPDATE records SET missing_since_run = $3, changed_run = $3 WHERE source = $1 AND {inside} "
                "AND missing_since_run IS NULL AND record_id NOT IN (SELECT record_id FROM seen WHERE source = $1)",
                [name, file.file, run_id],
            )
        for gone in source.gone:
            connection.execute(
                "UPDATE records SET missing_since_run = $3, changed_run = $3 WHERE source = $1 "
                "AND (file = $2 OR starts_with(file, $2 || '/')) AND missing_since_run IS NULL",
                [name, gone, run_id],
            )
            connection.execute(
                "DELETE FROM rejects WHERE source = $1 AND (file = $2 OR starts_with(file, $2 || '/'))", [name, gone]
            )
            connection.execute(
                "UPDATE files SET missing_since_run = ? WHERE source = ? AND file = ?", [run_id, name, gone]
            )
        connection.execute("DELETE FROM seen WHERE source = ?", [name])
        first = one_row(connection, "SELECT first_run FROM sources WHERE source = ?", [name])
        connection.execute("DELETE FROM sources WHERE source = ?", [name])
        connection.execute(
            "INSERT INTO sources VALUES (?, ?, ?, ?, ?, ?)",
            [name, str(source.root), source.kind, json.dumps(source.settings.model_dump(), sort_keys=True),
             first[0] if first else run_id, run_id],
        )  # fmt: skip
