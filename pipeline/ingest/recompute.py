"""New canonical forms from the structures in the store, when a canonical setting changed. Needs no input file."""

from __future__ import annotations

from collections.abc import Iterator

import duckdb
import numpy as np
import polars as pl
import pyarrow as pa

from ..cell.canonical import canonicalise
from ..errors import NumericsError
from ..model.batch import CrystalBatch
from ..settings import Settings
from ..store.manifest import Done
from ..store.parts import Part, files_there
from ..store.rows import one_number
from ..store.transaction import transaction
from ..store.workspace import Workspace
from .commit import insert_canonical_forms
from .engine import Engine, done_in_order
from .progress import Progress
from .reduce import ReduceJob, accepted_part, crystal_columns, stored_job


def recompute_canonical(workspace: Workspace, settings: Settings, pool: Engine, progress: Progress) -> int:
    """Reduce every stored structure anew, replace the rows of `canonical_forms` and drop `crystal_types`; their number.

    Chunks already replaced are replaced again after a kill: the result is the same.
    """
    connection = workspace.connection
    total = one_number(connection, "SELECT count(*) FROM structures")
    progress.start("reducing stored structures anew", total)
    done = 0
    for job, count in done_in_order(pool, _reduce_stored, _jobs(workspace, settings, total), workspace.manifest):
        _replace(connection, accepted_part(workspace.manifest.checked(job.part)))
        job.raw.unlink()
        workspace.manifest.drop(job.part)
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
        yield stored_job(workspace.place, "again", number, frame, settings)


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


def _reduce_stored(job: ReduceJob) -> Done:
    frame = job.raw.frame()
    there = files_there((accepted_part(job.part),))
    if there is not None:
        return Done(len(frame), there)
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
    return Done(len(frame), (accepted_part(job.part).write(pa.table(columns)),))


def _replace(connection: duckdb.DuckDBPyConnection, part: Part) -> None:
    with transaction(connection):
        connection.execute("CREATE OR REPLACE TEMP TABLE again AS SELECT * FROM read_parquet(?)", [str(part)])
        connection.execute("DELETE FROM canonical_forms WHERE record_id IN (SELECT record_id FROM again)")
        insert_canonical_forms(connection, "again i")
        connection.execute(
            "UPDATE records SET sites_primitive = again.sites_primitive FROM again "
            "WHERE records.record_id = again.record_id AND records.sites_primitive <> again.sites_primitive"
        )
