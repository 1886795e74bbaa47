"""One chunk's parts into the store, in one transaction with the note that the chunk is done."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import duckdb
import polars as pl

from ..model.columns import TABLES
from ..store.parts import Part
from ..store.rows import one_row
from ..store.transaction import transaction
from .reduce import accepted_part, rejects_part
from .split import RawChunk

RECORD_COLUMNS = (
    "label, file, position, reader, content_hash, raw_hash, formula, formula_anonymous, elements, composition, "
    "sites_given, sites_primitive, periodicity, energy_ev_per_site, theory, split, record_date, properties"
)
FACT_COLUMNS = ("energy_ev_per_site", "theory", "split", "record_date", "properties")


@dataclass(frozen=True, slots=True)
class ChunkToCommit:
    """What is known of a chunk when its parts are there."""

    run_id: int
    source: str
    chunk: RawChunk
    unchanged: pl.DataFrame
    """record_id, position, file of raw records that the store holds just so: they were not worked on again."""

    recompute: bool
    """Canonical rows of known records are replaced even where the content is equal."""

    all_new: bool
    """The store has no record of the source but those of other chunks of this run."""


def commit_chunk(
    connection: duckdb.DuckDBPyConnection, work: ChunkToCommit, part: Part, rows: Mapping[str, int]
) -> dict[str, int]:
    """Write the chunk, whose part is on this machine and as the manifest lists it. rows: of each file of the part.

    Returns the counts of the chunk's row in `chunks`.
    """
    with transaction(connection):
        return _commit(connection, work, part, rows[rejects_part(part).name], rows[accepted_part(part).name])


def is_committed(connection: duckdb.DuckDBPyConnection, run_id: int, source: str, chunk: RawChunk) -> bool:
    """True where this very chunk was written earlier in the same run. Read-only."""
    row = one_row(
        connection,
        "SELECT 1 FROM chunks WHERE run_id = ? AND source = ? AND chunk = ? AND digest = ?",
        [run_id, source, chunk.number, chunk.digest],
    )
    return row is not None


def _commit(
    connection: duckdb.DuckDBPyConnection, work: ChunkToCommit, part: Part, rejected: int, accepted: int
) -> dict[str, int]:
    run, source = work.run_id, work.source
    for file in work.chunk.begins:
        connection.execute(
            "DELETE FROM rejects WHERE source = $1 AND (file = $2 OR starts_with(file, $2 || '/'))", [source, file]
        )
    if rejected:
        connection.execute(
            "INSERT INTO rejects SELECT ?, file, position, label, stage, reason, message, ? FROM read_parquet(?)",
            [source, run, str(rejects_part(part))],
        )
    counts = {"found": len(work.chunk.records), "rejected": rejected, "unchanged": len(work.unchanged)}
    worked = {"new": 0, "amended": 0, "replaced": 0, "unchanged": 0}
    if accepted:
        worked = _commit_incoming(connection, work, str(accepted_part(part)), accepted)
    if len(work.unchanged):
        connection.register("unchanged_frame", work.unchanged.to_arrow())
        connection.execute(
            "UPDATE records SET position = u.position, missing_since_run = NULL, "
            "changed_run = CASE WHEN missing_since_run IS NULL THEN changed_run ELSE ? END FROM unchanged_frame u "
            "WHERE records.record_id = u.record_id "
            "AND (records.position <> u.position OR records.missing_since_run IS NOT NULL)",
            [run],
        )
        connection.execute("INSERT INTO seen SELECT ?, file, record_id FROM unchanged_frame", [source])
        connection.unregister("unchanged_frame")
    counts["unchanged"] += worked["unchanged"]
    counts["new"], counts["amended"], counts["replaced"] = worked["new"], worked["amended"], worked["replaced"]
    counts["accepted"] = counts["unchanged"] + counts["new"] + counts["amended"] + counts["replaced"]
    connection.execute(
        "INSERT INTO chunks VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        [run, source, work.chunk.number, work.chunk.digest]
        + [counts[k] for k in ("found", "accepted", "rejected", "new", "amended", "replaced", "unchanged")],
    )
    return counts


def _commit_incoming(
    connection: duckdb.DuckDBPyConnection, work: ChunkToCommit, part: str, accepted: int
) -> dict[str, int]:
    run, source = work.run_id, work.source
    ours = "SELECT 1 FROM records WHERE record_id IN (SELECT record_id FROM read_parquet(?)) LIMIT 1"
    if work.all_new or one_row(connection, ours, [part]) is None:
        _commit_new(connection, work, part)
        return {"new": accepted, "amended": 0, "replaced": 0, "unchanged": 0}
    same_facts = " AND ".join(f"r.{c} IS NOT DISTINCT FROM i.{c}" for c in FACT_COLUMNS)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE change AS SELECT i.record_id, "
        "CASE WHEN r.record_id IS NULL THEN 'new' WHEN r.content_hash <> i.content_hash THEN 'replaced' "
        f"WHEN NOT ({same_facts}) THEN 'amended' ELSE 'unchanged' END AS change, "
        "coalesce(r.first_run, $1) AS first_run, "
        "CASE WHEN r.content_hash = i.content_hash THEN r.content_run ELSE $1 END AS content_run, "
        f"CASE WHEN r.content_hash = i.content_hash AND {same_facts} AND r.missing_since_run IS NULL AND NOT $3 "
        "THEN r.changed_run ELSE $1 END AS changed_run "
        "FROM read_parquet($2) i LEFT JOIN records r USING (record_id)",
        [run, part, work.recompute],
    )
    rows = connection.execute("SELECT change, count(*) FROM change GROUP BY change").fetchall()
    counts = {"new": 0, "amended": 0, "replaced": 0, "unchanged": 0, **dict(rows)}
    # Structures and canonical forms are written anew only with new content, unless everything is computed again.
    written = "c.change IN ('new', 'replaced')" if not work.recompute else "true"
    if counts["new"] < sum(counts.values()):
        _set_known_aside(connection, run, written)
    connection.execute(
        f"INSERT INTO records (record_id, source, {RECORD_COLUMNS}, first_run, content_run, changed_run, "
        f"missing_since_run) SELECT i.record_id, $1, {RECORD_COLUMNS}, c.first_run, c.content_run, c.changed_run, NULL "
        "FROM read_parquet($2) i JOIN change c USING (record_id) ORDER BY i.row",
        [source, part],
    )
    changed = f"read_parquet(?) i JOIN change c USING (record_id) WHERE {written}"
    connection.execute(
        "INSERT INTO structures SELECT i.record_id, i.given_cell, i.given_species, i.given_positions "
        f"FROM {changed} ORDER BY i.row",
        [part],
    )
    insert_canonical_forms(connection, changed, [part])
    connection.execute("INSERT INTO seen SELECT ?, file, record_id FROM read_parquet(?)", [source, part])
    return counts


def _commit_new(connection: duckdb.DuckDBPyConnection, work: ChunkToCommit, part: str) -> None:
    """Write a chunk of which the store knows no record: nothing is compared. The rows of a part are in their order."""
    connection.execute(
        f"INSERT INTO records (record_id, source, {RECORD_COLUMNS}, first_run, content_run, changed_run, "
        f"missing_since_run) SELECT i.record_id, $1, {RECORD_COLUMNS}, $3, $3, $3, NULL FROM read_parquet($2) i",
        [work.source, part, work.run_id],
    )
    connection.execute(
        "INSERT INTO structures SELECT i.record_id, i.given_cell, i.given_species, i.given_positions "
        "FROM read_parquet(?) i",
        [part],
    )
    insert_canonical_forms(connection, "read_parquet(?) i", [part])
    connection.execute("INSERT INTO seen SELECT ?, file, record_id FROM read_parquet(?)", [work.source, part])


def _set_known_aside(connection: duckdb.DuckDBPyConnection, run: int, written: str) -> None:
    """Keep the present state of amended and replaced records as versions; delete the rows that are written anew."""
    connection.execute(
        "INSERT INTO record_versions SELECT r.record_id, "
        "1 + (SELECT count(*) FROM record_versions v WHERE v.record_id = r.record_id), c.change, $1, r.content_hash, "
        "r.composition, x.crystal_key, r.energy_ev_per_site, r.theory, r.split, r.record_date, r.properties, "
        "s.cell_angstrom, s.species, s.positions_fractional FROM records r JOIN change c USING (record_id) "
        "JOIN structures s USING (record_id) JOIN canonical_forms x USING (record_id) "
        "WHERE c.change IN ('amended', 'replaced') ORDER BY r.file, r.position",
        [run],
    )
    known = "SELECT c.record_id FROM change c WHERE c.change <> 'new'"
    connection.execute(f"DELETE FROM records WHERE record_id IN ({known})")
    for table in ("structures", "canonical_forms"):
        connection.execute(f"DELETE FROM {table} WHERE record_id IN ({known} AND {written})")


def insert_canonical_forms(connection: duckdb.DuckDBPyConnection, rows: str, values: Sequence[object] = ()) -> None:
    """Insert into `canonical_forms` from a part's rows: the text after FROM, with the part under the name i."""
    columns = ", ".join(f"i.{column.name}" for column in TABLES["canonical_forms"].columns)
    connection.execute(f"INSERT INTO canonical_forms SELECT {columns} FROM {rows} ORDER BY i.row", list(values))
