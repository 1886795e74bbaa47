"""The kept records as one table: the input's own columns where they can still be read, ours prefixed `census_`."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from pathlib import Path
from typing import Literal

import duckdb
import polars as pl

from ..model.refusals import Refusal
from ..readers.detect import COMPRESSIONS
from ..readers.jsonl import objects_of
from ..readers.tables import STRUCTURE_COLUMNS
from ..store.rows import one_row
from .cif import cif_text
from .structures import given_structures

JSON_LINE_LIMIT = 1 << 30
"""Bytes of one JSON line; the reader's own limit was held when the file was read."""

OURS = (
    "record_id", "source", "label", "formula", "sites_given", "sites_primitive", "periodicity", "crystal_key",
    "volume_angstrom3_per_site", "area_angstrom2_per_site", "energy_ev_per_site", "theory", "split", "group_size",
    "held", "dealt_split",
)  # fmt: skip


def write_table(
    connection: duckdb.DuckDBPyConnection,
    kept: pl.DataFrame,
    path: Path,
    form: Literal["csv", "parquet"],
    from_input: bool = True,
) -> list[str]:
    """Write the table of the kept records; returns sentences about rows that could not be taken from their input.

    kept: rows of selection.kept_rows; from_input: False where the records are wanted as they were earlier. A record of
    a CSV, Parquet or JSON-lines file whose bytes are still those that were read keeps all its input columns as they
    stand there; any other record gets `label`, its properties, and `cif` written from the store (the structure as it
    came).
    """
    parts, notes = [], []
    for (source, file, reader), rows in kept.group_by(["source", "file", "reader"], maintain_order=True):
        original = None
        if reader in _TABLES and from_input:
            original, why = _original(connection, str(source), str(file), str(reader), rows)
            if original is None:
                notes.append(f"{source}: {file} {why}; its records are written from the store.")
        if original is None:
            original = _from_store(connection, rows)
        present = [name for name in OURS if name in rows.columns]
        ours = rows.select(present).rename({name: f"census_{name}" for name in present})
        parts.append(pl.concat([original, ours], how="horizontal"))
    table = pl.concat(parts, how="diagonal_relaxed") if parts else pl.DataFrame()
    if parts:
        ordered = pl.concat([rows for _, rows in kept.group_by(["source", "file", "reader"], maintain_order=True)])
        table = _with_every_structure(connection, table, ordered)
    if form == "csv":
        table.write_csv(path)
    else:
        table.write_parquet(path)
    return notes


def _with_every_structure(
    connection: duckdb.DuckDBPyConnection, table: pl.DataFrame, rows: pl.DataFrame
) -> pl.DataFrame:
    """The table with a structure text in every row of one column, as a reader of tables looks for it.

    Inputs that keep their structures in columns of different names leave gaps in each: those of `cif` are filled from
    the store.
    """
    column = next((name for name in STRUCTURE_COLUMNS if name in table.columns), None)
    if column is not None and table[column].null_count() == 0:
        return table
    if "cif" not in table.columns:
        table = table.with_columns(pl.lit(None, pl.String).alias("cif"))
    gaps = rows.filter(table["cif"].is_null())
    texts = [
        cif_text(cell, positions, species, name=label)
        for label, (cell, species, positions) in zip(
            gaps["label"], given_structures(connection, gaps, "then_structures"), strict=True
        )
    ]
    filled = dict(zip(gaps["record_id"], texts, strict=True))
    here = [filled.get(record) for record in rows["record_id"]]
    return table.with_columns(pl.coalesce("cif", pl.Series(here, dtype=pl.String)))


def _original(
    connection: duckdb.DuckDBPyConnection, source: str, file: str, reader: str, rows: pl.DataFrame
) -> tuple[pl.DataFrame | None, str]:
    """The input's own columns of these rows, by place in the file; or None and why they cannot be had."""
    fact = one_row(
        connection,
        "SELECT s.root, s.kind, f.sha256 FROM sources s JOIN files f USING (source) WHERE s.source = ? AND f.file = ?",
        [source, file],
    )
    if fact is None:
        return None, "stands inside an archive"
    path = Path(fact[0]) if fact[1] == "file" else Path(fact[0]) / file
    if not path.is_file():
        return None, "is not there any more"
    with path.open("rb") as f:
        if hashlib.file_digest(f, "sha256").hexdigest() != fact[2]:
            return None, "is not the file that was read"
    if path.suffix in COMPRESSIONS:
        return None, "is compressed"
    frame = _TABLES[reader](path)
    places = rows.select(pl.col("position").cast(pl.Int64).alias("census_place"))
    frame = frame.with_row_index("census_place").with_columns(pl.col("census_place").cast(pl.Int64))
    chosen = places.lazy().join(frame, on="census_place", how="left", maintain_order="left")
    return chosen.drop("census_place").collect(), ""


def _scan_csv(path: Path) -> pl.LazyFrame:
    """Every column as the text that stands in the file, so that numbers keep their digits."""
    return pl.scan_csv(path, infer_schema=False, separator="\t" if path.suffix == ".tsv" else ",")


def _scan_jsonl(path: Path) -> pl.LazyFrame:
    """One row an object, counted as the reader counts them: a line that is no object is a row of nulls."""
    with path.open("rb") as f:
        objects = [{} if isinstance(o, Refusal) else o for _, o in objects_of(f, JSON_LINE_LIMIT)]
    plain = [{name: _plain(value) for name, value in o.items()} for o in objects]
    return pl.from_dicts(plain, infer_schema_length=None, strict=False).lazy()


_TABLES: dict[str, Callable[[Path], pl.LazyFrame]] = {
    "csv": _scan_csv,
    "parquet": pl.scan_parquet,
    "jsonl": _scan_jsonl,
}
"""Readers whose records are rows of a table, with a scan that has one row a record of the file."""


def _from_store(connection: duckdb.DuckDBPyConnection, rows: pl.DataFrame) -> pl.DataFrame:
    connection.register("wanted", rows.select("record_id").with_row_index("place").to_arrow())
    try:
        texts = connection.sql(
            "SELECT r.properties FROM wanted w JOIN then_records r USING (record_id) ORDER BY w.place"
        ).fetchall()
    finally:
        connection.unregister("wanted")
    properties = [{k: _plain(v) for k, v in json.loads(text).items()} for (text,) in texts]
    cifs = [
        cif_text(cell, positions, species, name=label)
        for label, (cell, species, positions) in zip(
            rows["label"], given_structures(connection, rows, "then_structures"), strict=True
        )
    ]
    frame = pl.DataFrame({"label": rows["label"], "cif": pl.Series(cifs, dtype=pl.String)})
    if not any(properties):
        return frame
    extra = pl.from_dicts(properties, infer_schema_length=None, strict=False)
    return pl.concat([frame, extra.select(c for c in extra.columns if c not in ("label", "cif"))], how="horizontal")


def _plain(value: object) -> object:
    return value if value is None or isinstance(value, bool | int | float | str) else json.dumps(value)
