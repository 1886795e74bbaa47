"""Is this crystal there already? New structures against the store, which they are not added to."""

from __future__ import annotations

import json
import tempfile
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import duckdb
import polars as pl

from ..ingest.pool import WorkerPool
from ..ingest.progress import Progress
from ..settings import Settings, SourceSettings
from ..store.rows import one_number
from .known_matching import neighbours
from .known_reading import read_new

GRADES = ("copy", "key", "same", "near")

COLUMNS = (
    "file", "label", "verdict", "grade", "record", "record_id", "kept_record", "shift_angstrom", "strain", "message",
)  # fmt: skip


def known(
    connection: duckdb.DuckDBPyConnection,
    paths: Sequence[Path],
    settings: Settings,
    grade: str,
    of_source: SourceSettings,
    pool: WorkerPool,
    progress: Progress,
) -> list[dict[str, Any]]:
    """One row a structure, in the order they are read, with the columns COLUMNS.

    verdict: known (a stored crystal matches at `grade` or stricter), new, or refused. grade, record, shift and strain
    are those of the match; of a new one, of its closest neighbour, where one lies in the window. settings: those of the
    store. of_source: where tables keep labels and structures; where it does not say, what the store knows of a source
    of the path's name holds. Read-only; raises UsageError for a path that is not there.
    """
    stored = {
        name: {column: json.loads(text).get(column) for column in ("id_column", "structure_column")}
        for name, text in connection.execute("SELECT source, settings FROM sources").fetchall()
    }

    def told(name: str) -> SourceSettings:
        return SourceSettings.model_validate(stored.get(name, {}) | of_source.model_dump(exclude_none=True))

    with tempfile.TemporaryDirectory(prefix="lattice-census-") as folder:
        accepted, refused = read_new(paths, settings, told, pool, Path(folder), progress)
    if len(accepted):
        found = _matched(connection, accepted, settings, grade, progress)
    else:
        found = []
    rows = [
        {"file": file, "label": label, "verdict": "refused", "grade": None, "record": None, "record_id": None,
         "kept_record": None, "shift_angstrom": None, "strain": None, "message": f"{reason}: {message}",
         "place": place}
        for place, file, _, label, reason, message in refused.iter_rows()
    ]  # fmt: skip
    rows += found
    rows.sort(key=lambda row: int(row["place"]))
    return [{name: row[name] for name in COLUMNS} for row in rows]


def _matched(
    connection: duckdb.DuckDBPyConnection, accepted: pl.DataFrame, settings: Settings, asked: str, progress: Progress
) -> list[dict[str, Any]]:
    by_content = _smallest(connection, accepted, "content_hash", "r.content_hash")
    by_key = _smallest(connection, accepted, "crystal_key", "f.crystal_key")
    new = accepted.filter(~pl.col("crystal_key").is_in(list(by_key))).unique(
        "crystal_key", keep="first", maintain_order=True
    )
    close = neighbours(connection, new, settings, asked, progress)
    ids = sorted({*by_content.values(), *by_key.values(), *(n.record_id for n in close.values())})
    names = _names(connection, ids)
    kept = _kept(connection, ids)
    out = []
    for row in accepted.select("place", "file", "label", "content_hash", "crystal_key").iter_rows(named=True):
        record, grade, shift, strain = None, None, None, None
        neighbour = close.get(row["crystal_key"])
        if row["content_hash"] in by_content:
            record, grade, shift, strain = by_content[row["content_hash"]], "copy", 0.0, 0.0
        elif row["crystal_key"] in by_key:
            record, grade, shift, strain = by_key[row["crystal_key"]], "key", 0.0, 0.0
        elif neighbour is not None:
            record, grade, shift, strain = neighbour.record_id, neighbour.grade, neighbour.shift, neighbour.strain
        there = grade in GRADES and GRADES.index(grade) <= GRADES.index(asked)
        out.append(
            {"file": row["file"], "place": row["place"], "label": row["label"],
             "verdict": "known" if there else "new", "grade": grade,
             "record": names.get(record) if record else None, "record_id": record,
             "kept_record": names.get(kept.get(record, record)) if record else None,
             "shift_angstrom": shift, "strain": strain, "message": None}
        )  # fmt: skip
    return out


def _smallest(
    connection: duckdb.DuckDBPyConnection, accepted: pl.DataFrame, column: str, stored: str
) -> dict[str, str]:
    """By content or key: the current record with the smallest id that has it."""
    connection.register("asked_for", accepted.select(pl.col(column).alias("value")).unique().to_arrow())
    try:
        return dict(
            connection.execute(
                f"SELECT {stored}, min(r.record_id) FROM current_records r JOIN canonical_forms f USING (record_id) "
                f"JOIN asked_for a ON a.value = {stored} GROUP BY {stored} ORDER BY ALL"
            ).fetchall()
        )
    finally:
        connection.unregister("asked_for")


def _kept(connection: duckdb.DuckDBPyConnection, ids: list[str]) -> dict[str, str]:
    """The kept record of the group of each record, at near where that was computed, else at key."""
    near = one_number(connection, "SELECT count(*) FROM (SELECT 1 FROM members WHERE grade = 'near' LIMIT 1)")
    return dict(
        connection.execute(
            "SELECT record_id, group_id FROM members WHERE grade = ? AND record_id IN (SELECT unnest(?))",
            ["near" if near else "key", ids],
        ).fetchall()
    )


def _names(connection: duckdb.DuckDBPyConnection, ids: list[str]) -> dict[str, str]:
    """SOURCE:LABEL of the records and of the records kept in their place."""
    return dict(
        connection.execute(
            "SELECT record_id, source || ':' || label FROM records WHERE record_id IN (SELECT unnest($1)) "
            "OR record_id IN (SELECT group_id FROM members WHERE record_id IN (SELECT unnest($1)))",
            [ids],
        ).fetchall()
    )
