"""New canonical forms from the structures in the store, when a canonical setting changed. Needs no input file."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from pathlib import Path

import duckdb
import numpy as np
import polars as pl
import pyarrow as pa

from ..cell.canonical import canonicalise
from ..errors import NumericsError
from ..model.batch import CrystalBatch
from ..settings import Settings, SourceSettings
from ..store.rows import one_number
from ..store.workspace import Workspace
from .commit import insert_canonical_forms
from .pool import WorkerPool
from .progress import Progress
from .reduce import ReduceJob, accepted_part, crystal_columns, write_part


def recompute_canonical(workspace: Workspace, settings: Settings, pool: WorkerPool, progress: Progress) -> int:
    """Reduce every stored structure anew, replace the rows of `canonical_forms` and drop `crystal_types`; their number.

    Chunks already replaced are replaced again after a kill: the result is the same.
    """
    connection = workspace.connection
    total = one_number(connection, "SELECT count(*) FROM structures")
    progress.start("reducing stored structures anew", total)
    done = 0
    for job, count in pool.ordered_results(_reduce_stored, _jobs(workspace, settings, total)):
        _replace(connection, accepted_part(job.part))
        job.raw.unlink()
        accepted_part(job.part).unlink()
        progress.advance(count)
        done += count
    connection.execute("DELETE FROM crystal_types")  # their tolerances may be the ones that changed
    return done


def _jobs(workspace: Workspace, settings: Settings, total: int) -> Iterator[ReduceJob]:
    for number, start in enumerate(range(0, total, settings.chunk_records)):
        frame = workspace.connection.sql(
            "SELECT s.record_id, s.cell_angstrom, s.species, s.positions_fractional, r.periodicity FROM structures s "
            f"JOIN records r USING (record_id) ORDER BY s.record_id LIMIT {settings.chunk_records} OFFSET {start}"
        ).pl()
        digest = hashlib.sha256("\0".join(frame["record_id"]).encode() + repr(settings).encode()).hexdigest()[:32]
        part = workspace.parts / f"again-{digest}"
        raw = part.with_name(part.name + ".raw.parquet")
        frame.write_parquet(raw, compression="lz4")
        yield ReduceJob(number, raw, part, settings, SourceSettings())


def stored_batch(frame: pl.DataFrame) -> CrystalBatch:
    """The batch of rows with cell_angstrom, species, positions_fractional and periodicity."""
    counts = frame["species"].list.len().to_numpy()
    words = frame["species"].explode(empty_as_null=False)
    tokens = sorted(set(words.unique().to_list()))
    codes = words.replace_strict(tokens, list(range(len(tokens))), return_dtype=pl.Int32).to_numpy()
    return CrystalBatch(
        np.ascontiguousarray(frame["cell_angstrom"].to_numpy(), np.float64).reshape(-1, 3, 3),
        np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        frame["positions_fractional"].explode(empty_as_null=False).to_numpy().reshape(-1, 3),
        codes,
        tuple(tokens),
        frame["periodicity"].to_numpy().astype(np.uint8),
    )


def _reduce_stored(job: ReduceJob) -> int:
    frame = pl.read_parquet(job.raw)
    batch = stored_batch(frame)
    canonical = canonicalise(batch, job.settings.tolerances)
    if canonical.refusals:
        row, refusal = canonical.refusals[0]
        raise NumericsError(
            f"Record {frame['record_id'][row]} was accepted before and cannot be reduced with the new settings: "
            f"{refusal.message}. Choose other settings; give the command again."
        )
    columns = {
        "row": pa.array(np.arange(len(frame), dtype=np.uint32)),
        "record_id": frame["record_id"].to_arrow(),
        **crystal_columns(batch, canonical),
    }
    write_part(pa.table(columns), accepted_part(job.part))
    return len(frame)


def _replace(connection: duckdb.DuckDBPyConnection, part: Path) -> None:
    connection.execute("BEGIN")
    try:
        connection.execute("CREATE OR REPLACE TEMP TABLE again AS SELECT * FROM read_parquet(?)", [str(part)])
        connection.execute("DELETE FROM canonical_forms WHERE record_id IN (SELECT record_id FROM again)")
        insert_canonical_forms(connection, "again i")
        connection.execute(
            "UPDATE records SET sites_primitive = again.sites_primitive FROM again "
            "WHERE records.record_id = again.record_id AND records.sites_primitive <> again.sites_primitive"
        )
        connection.execute("COMMIT")
    except BaseException:
        connection.execute("ROLLBACK")
        raise
