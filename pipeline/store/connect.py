"""Opening a DuckDB file, with errors that say what to do."""

from __future__ import annotations

import re
from pathlib import Path

import duckdb

from ..errors import StoreError
from .schema import known_version, stored_version

WRITER_MEMORY = "2GiB"
"""Memory that the database may take in a run; beyond it, it uses a folder beside the work store."""


LOG_SIZE = "256MiB"
"""Size at which the write-ahead log is worked into a work store: each time costs more, the larger the store is."""


def open_for_reading(path: Path) -> duckdb.DuckDBPyConnection:
    """The published store, read-only. Raises StoreError (missing, held by a writer, damaged, newer, or no store)."""
    if not path.exists():
        raise no_store(path)
    connection = _connect(path, read_only=True)
    _check_version(connection, path)
    return connection


def has_store(published: Path) -> bool:
    """Whether the published file or its work store is there."""
    return published.exists() or (published.with_name(published.name + ".work") / "work.duckdb").exists()


def no_store(path: Path) -> StoreError:
    """The error for a store that is not there."""
    return StoreError(f"There is no store at {path}. Make one with: lattice-census ingest PATH --store {path}")


def open_for_writing(path: Path) -> duckdb.DuckDBPyConnection:
    """A work store that this process alone holds; made when missing. Raises StoreError."""
    connection = _connect(path, read_only=False)
    connection.execute("SET memory_limit = ?", [WRITER_MEMORY])
    connection.execute("SET wal_autocheckpoint = ?", [LOG_SIZE])
    if stored_version(connection) is not None:
        _check_version(connection, path)
    return connection


def _connect(path: Path, read_only: bool) -> duckdb.DuckDBPyConnection:
    try:
        return duckdb.connect(str(path), read_only=read_only)
    except duckdb.Error as error:
        text = str(error)
        if "lock" in text.lower() and "conflicting" in text.lower():
            holder = re.search(r"PID (\d+)", text)
            who = f"process {holder[1]}" if holder else "another process"
            raise StoreError(f"{path} is held open for writing by {who}. Close it there and try again.") from error
        if path.is_dir():
            raise StoreError(f"{path} is a folder; --store names a file.") from error
        beside = path.with_name(path.name + ".work")
        if (beside / "work.duckdb").exists():
            what = f"Move it away: the next `lattice-census ingest PATH` publishes the store again from {beside}."
        else:
            what = "Give another --store, or put a sound copy in its place."
        first = text.splitlines()[0].rstrip(".!")
        raise StoreError(f"{path} cannot be opened as a store: {first}. {what}") from error


def _check_version(connection: duckdb.DuckDBPyConnection, path: Path) -> None:
    version = stored_version(connection)
    if version is None:
        connection.close()
        raise StoreError(f"{path} is a DuckDB file, but not a store of lattice-census. Give another --store.")
    if version > known_version():
        connection.close()
        raise StoreError(
            f"{path} was written by a newer lattice-census (schema {version}, this one knows {known_version()}). "
            "Update lattice-census."
        )
