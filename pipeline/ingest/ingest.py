"""The whole of `ingest`: scan, split, reduce, commit, finish, group exactly, publish."""

from __future__ import annotations

import json
import logging
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import duckdb
import polars as pl

from ..settings import Settings
from ..store.parts import Part
from ..store.rows import one_number, one_row
from ..store.runs import Run, begin_run
from ..store.stages import changed_stages, record_settings, refuse_mixed, stored_settings
from ..store.transaction import transaction
from ..store.workspace import Workspace
from .commit import ChunkToCommit, commit_chunk, is_committed
from .engine import Engine, done_in_order
from .finish import finish_source
from .progress import Progress
from .reduce import ReduceJob, part_name, reduce_chunk
from .scan import IngestRequest, Plan, SourceToRead, scan
from .split import RawChunk, raw_chunks

log = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True)
class IngestWork:
    """An ingest that has something to do."""

    run: Run
    plan: Plan
    settings: Settings
    canonical_again: bool
    """A canonical or fingerprint setting changed: all stored structures are to be reduced and typed anew."""


def prepare_ingest(workspace: Workspace, request: IngestRequest, settings: Settings, command: str) -> IngestWork | None:
    """Scan, check the settings, and begin or resume the run; None where there is nothing to do."""
    connection = workspace.connection
    changed = changed_stages(connection, settings)
    if not request.recompute:
        refuse_mixed(connection, settings, ("parse", "canonical", "fingerprint"))
    plan = scan(connection, request, settings, read_all="parse" in changed)
    unfinished = one_row(
        connection,
        "SELECT 1 FROM runs WHERE status = 'running' AND plan_hash = ?",
        [plan.hash],
    )
    if not unfinished and not request.recompute and not any(source.stale for source in plan.sources):
        return None
    run = begin_run(connection, command, plan.arguments, plan.hash, settings.model_dump(), request.recompute)
    if run.resumed:
        log.info("Run %d was interrupted; going on with it.", run.run_id)
    if not stored_settings(connection):
        with transaction(connection):
            record_settings(connection, settings, ("parse", "canonical", "fingerprint"))
    return IngestWork(run, plan, settings, request.recompute and bool({"canonical", "fingerprint"} & set(changed)))


def read_source(workspace: Workspace, work: IngestWork, source: SourceToRead, pool: Engine, progress: Progress) -> None:
    """Read, reduce and commit all changed files of a source, chunk by chunk in order, then finish it."""
    connection = workspace.connection
    found: Counter[str] = Counter({f.file: 0 for f in source.files if f.changed})
    progress.start(f"reading {source.source}", None)

    waiting: dict[int, ChunkToCommit] = {}
    # Asked before the first chunk is in: later every source has records, and each chunk would run through all of them.
    known = one_row(connection, _KNOWN, [source.source]) is not None

    def jobs() -> Iterator[ReduceJob]:
        for chunk in raw_chunks(source, work.settings):
            found.update(chunk.found)
            if is_committed(connection, work.run.run_id, source.source, chunk):
                progress.advance(len(chunk.records))
                continue
            yield _job(workspace, work, source, chunk, known, waiting)

    for job, _ in done_in_order(pool, reduce_chunk, jobs(), workspace.manifest):
        todo = waiting.pop(job.number)
        part = workspace.manifest.checked(job.part)
        commit_chunk(connection, todo, part, workspace.manifest.rows(job.part))
        job.raw.unlink()
        workspace.manifest.drop(job.part)
        progress.advance(len(todo.chunk.records))
    finish_source(connection, work.run.run_id, source, dict(found))


def _job(
    workspace: Workspace,
    work: IngestWork,
    source: SourceToRead,
    chunk: RawChunk,
    known: bool,
    waiting: dict[int, ChunkToCommit],
) -> ReduceJob:
    """Leave out what the store holds just so, write the rest for a worker, and remember what to commit."""
    unchanged = chunk.records.clear().select("record_id", "file", "position")
    if known and not source.force:
        unchanged = _unchanged(workspace.connection, chunk)
    todo = chunk.records.join(unchanged, on="record_id", how="anti", maintain_order="left")
    name = part_name(chunk.digest, unchanged["record_id"].to_list(), work.settings, source.settings)
    raw = Part(workspace.place, name + ".raw.parquet")
    raw.write_frame(todo)
    light = RawChunk(
        chunk.number, chunk.records.select("record_id"), chunk.begins, chunk.found, chunk.digest
    )  # the texts are on disk now: do not hold them while the chunk is in flight
    waiting[chunk.number] = ChunkToCommit(work.run.run_id, source.source, light, unchanged, source.force, not known)
    return ReduceJob(chunk.number, raw, raw.with_name(name), work.settings, source.settings)


_KNOWN = "SELECT 1 FROM records WHERE source = ? LIMIT 1"


def _unchanged(connection: duckdb.DuckDBPyConnection, chunk: RawChunk) -> pl.DataFrame:
    connection.register("raw_frame", chunk.records.select("record_id", "file", "position", "raw_hash").to_arrow())
    try:
        found: pl.DataFrame = connection.sql(
            "SELECT f.record_id, f.file, f.position FROM raw_frame f JOIN records r USING (record_id) "
            "WHERE f.raw_hash = r.raw_hash ORDER BY f.file, f.position"
        ).pl()
        return found
    finally:
        connection.unregister("raw_frame")


def ingest_counts(connection: duckdb.DuckDBPyConnection, work: IngestWork) -> dict[str, Any]:
    """What the run did, from what the store says: the same whether or not it was interrupted. Read-only."""
    row = one_row(
        connection,
        "SELECT coalesce(sum(found), 0), coalesce(sum(accepted), 0), coalesce(sum(rejected), 0), "
        "coalesce(sum(new_records), 0), coalesce(sum(amended), 0), coalesce(sum(replaced), 0), "
        "coalesce(sum(unchanged), 0) FROM chunks WHERE run_id = ?",
        [work.run.run_id],
    )
    names = ("found", "accepted", "rejected", "new", "amended", "replaced", "unchanged")
    counts: dict[str, Any] = dict(zip(names, map(int, row or ()), strict=True))
    for name, sql in {
        "missing": "SELECT count(*) FROM records WHERE missing_since_run = ?",
        "files_read": "SELECT count(*) FROM files WHERE last_run = ?",
        "files_missing": "SELECT count(*) FROM files WHERE missing_since_run = ?",
    }.items():
        counts[name] = one_number(connection, sql, [work.run.run_id])
    counts["files_unchanged"] = sum(len(s.files) for s in work.plan.sources) - counts["files_read"]
    reasons = connection.execute(
        "SELECT reason, count(*) FROM rejects WHERE run_id = ? GROUP BY reason ORDER BY reason", [work.run.run_id]
    ).fetchall()
    counts["reasons"] = dict(reasons)
    return counts


def energies_without_unit(connection: duckdb.DuckDBPyConnection, plan: Plan) -> list[str]:
    """Sources with an energy column and no unit: their numbers stay in the properties, which is to be said once."""
    out = []
    for source in plan.sources:
        row = one_row(connection, "SELECT settings FROM sources WHERE source = ?", [source.source])
        stored = json.loads(row[0]) if row else {}
        if stored.get("energy_column") and not stored.get("energy_unit"):
            out.append(source.source)
    return out
