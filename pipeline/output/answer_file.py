"""An answer as a file: CSV or Parquet, written as it streams in, under a temporary name, and then renamed."""

from __future__ import annotations

import csv
import json
import os
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import duckdb

from ..errors import UsageError
from .ask import Limits, Watch, distinct
from .tables import json_value

BATCH_ROWS = 10_000


def check_target(path: Path) -> None:
    """UsageError unless the path is a new .csv or .parquet file in a folder that is there."""
    if path.suffix.lower() not in (".csv", ".parquet"):
        raise UsageError(f"--out {path}: the name has to end in .csv or .parquet.")
    if path.exists() or path.is_symlink():
        raise UsageError(f"--out {path}: the file exists already; it is not written over.")
    if not path.absolute().parent.is_dir():
        raise UsageError(f"--out {path}: there is no folder {path.absolute().parent}.")


def write_answer(
    connection: duckdb.DuckDBPyConnection,
    sql: str,
    values: Mapping[str, Any],
    path: Path,
    limits: Limits,
    give_up: Callable[[str], None] | None = None,
) -> tuple[int, bool]:
    """Write the rows of one SELECT; returns how many, and whether there were more than the limit.

    The file is there whole or not at all. Values are those of the store, unrounded; in a CSV, lists and structures are
    JSON, NULL is an empty cell. Errors as `ask.ask`, and UsageError as `check_target`.
    """
    check_target(path)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.new")
    write = _write_csv if path.suffix.lower() == ".csv" else _write_parquet
    try:
        with Watch(connection, sql, limits, give_up) as watch:
            written, cut = write(connection, sql, values, temporary, limits.rows, watch)
        try:
            os.link(temporary, path)  # unlike a rename, this fails where the name was taken meanwhile
        except FileExistsError:
            check_target(path)
        except OSError:  # a file system without hard links
            temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)
    return written, cut


def _write_csv(
    connection: duckdb.DuckDBPyConnection,
    sql: str,
    values: Mapping[str, Any],
    path: Path,
    most: int | None,
    watch: Watch,
) -> tuple[int, bool]:
    cursor = connection.execute(sql, dict(values)) if values else connection.execute(sql)
    written = 0
    with path.open("x", newline="", encoding="utf-8") as f:
        writer = csv.writer(f)
        writer.writerow(distinct([d[0] for d in cursor.description or []]))
        for rows in _batches(cursor):
            watch.check()
            room = rows if most is None else rows[: most - written]
            writer.writerows([_csv_value(v) for v in row] for row in room)
            written += len(room)
            if len(room) < len(rows):
                return written, True
    return written, False


def _batches(cursor: duckdb.DuckDBPyConnection) -> Iterator[list[Any]]:
    while rows := cursor.fetchmany(BATCH_ROWS):
        yield rows


def _csv_value(value: Any) -> Any:
    if isinstance(value, bool):
        return "true" if value else "false"
    if value is None or isinstance(value, str | int | float):
        return value
    plain = json_value(value)
    return json.dumps(plain, ensure_ascii=False) if isinstance(plain, dict | list) else plain


def _write_parquet(
    connection: duckdb.DuckDBPyConnection,
    sql: str,
    values: Mapping[str, Any],
    path: Path,
    most: int | None,
    watch: Watch,
) -> tuple[int, bool]:
    import pyarrow as pa
    import pyarrow.parquet as pq

    relation = connection.sql(sql, params=dict(values)) if values else connection.sql(sql)
    reader = relation.to_arrow_reader(BATCH_ROWS)
    schema = pa.schema([f.with_name(n) for f, n in zip(reader.schema, distinct(reader.schema.names), strict=True)])
    written = 0
    with pq.ParquetWriter(path, schema, compression="zstd") as writer:
        for batch in _arrow_batches(reader):
            watch.check()
            room = batch if most is None else batch.slice(0, most - written)
            if room.num_rows:
                writer.write_batch(pa.RecordBatch.from_arrays(room.columns, schema=schema))
            written += room.num_rows
            if room.num_rows < batch.num_rows:
                return written, True
    return written, False


def _arrow_batches(reader: Any) -> Iterator[Any]:
    """The batches of a reader; an error of DuckDB comes through Arrow in other clothes and is given its own again."""
    import pyarrow as pa

    while True:
        try:
            batch = reader.read_next_batch()
        except StopIteration:
            return
        except (pa.ArrowException, OSError) as error:
            text = str(error)
            raise (duckdb.OutOfMemoryException if text.startswith("Out of Memory") else duckdb.Error)(text) from error
        yield batch
