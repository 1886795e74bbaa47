"""Types of lattice and crystal, once a distinct key, after all chunks of a run are in the store."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import duckdb
import numpy as np
import polars as pl
import pyarrow as pa

from ..cell.crystal_type import classify_crystals
from ..cell.lattice_type import classify_lattices
from ..fingerprint.distributions import Fingerprint, column_means, distributions
from ..lattice.point_groups import point_group_order
from ..model.columns import TABLES
from ..settings import Settings
from ..store.manifest import Done
from ..store.parts import files_there
from ..store.rows import one_number
from ..store.transaction import transaction
from ..store.workspace import Workspace
from .engine import Engine, done_in_order, share
from .progress import Progress
from .recompute import stored_batch
from .reduce import ReduceJob, accepted_part, fixed, ragged, stored_job, token_lists
from .touched import find_touched_keys

# The record with the smallest id of each key, where the types of that key are missing or came from another record: so
# the types are a function of the records that are there, whatever order they came in.
TO_CLASSIFY = (
    "SELECT f.crystal_key, f.record_id FROM (SELECT crystal_key, min(record_id) AS record_id FROM touched_keys "
    "GROUP BY crystal_key HAVING min(record_id) IS NOT NULL) f LEFT JOIN crystal_types t USING (crystal_key) "
    "WHERE t.typed_record_id IS DISTINCT FROM f.record_id"
)


def classify_keys(
    workspace: Workspace, settings: Settings, pool: Engine, progress: Progress, meanwhile: Callable[[], None]
) -> int:
    """Classify every key that needs it, and drop the types of keys that no record has any more; returns how many.

    Each chunk is committed by itself; after a kill what is missing is found again. meanwhile: done once, while workers
    have chunks.
    """
    connection = workspace.connection
    find_touched_keys(connection, settings)
    connection.execute(
        "DELETE FROM crystal_types WHERE crystal_key IN (SELECT crystal_key FROM touched_keys WHERE record_id IS NULL)"
    )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE to_classify AS {TO_CLASSIFY} ORDER BY f.crystal_key")
    total = one_number(connection, "SELECT count(*) FROM to_classify")
    if not total:
        meanwhile()
        return 0
    progress.start("lattice types and space groups", total)
    again = one_number(connection, "SELECT count(*) FROM to_classify JOIN crystal_types USING (crystal_key)") > 0
    for job, count in done_in_order(pool, _classify, _jobs(workspace, settings, total), workspace.manifest):
        if job.number == 0:
            meanwhile()
        _commit(connection, str(accepted_part(workspace.manifest.checked(job.part))), again)
        job.raw.unlink()
        workspace.manifest.drop(job.part)
        progress.advance(count)
    return total


READ_AT_ONCE = 16_000
"""Rows that are read by one query: each runs through the whole table, so that chunk by chunk costs the square."""

FEW_KEYS = 400
"""A chunk has no fewer keys, but for the last one."""


def _jobs(workspace: Workspace, settings: Settings, total: int) -> Iterator[ReduceJob]:
    """The first query is for one chunk alone, so that a worker can begin."""
    start = number = 0
    while start < total:
        size = share(total - start, FEW_KEYS, settings.chunk_records)
        frame = workspace.connection.sql(
            "SELECT f.crystal_key, f.record_id, f.cell_angstrom, f.species, f.positions_fractional, r.periodicity "
            "FROM (SELECT record_id, crystal_key FROM to_classify ORDER BY crystal_key "
            f"LIMIT {max(size, READ_AT_ONCE) if start else size} OFFSET {start}) w "
            "JOIN canonical_forms f USING (record_id) JOIN records r USING (record_id) ORDER BY f.crystal_key"
        ).pl()
        done = 0
        while done < len(frame):
            size = share(total - start - done, FEW_KEYS, settings.chunk_records)
            yield stored_job(workspace.place, "types", number, frame.slice(done, size), settings)
            number, done = number + 1, done + size
        start += len(frame)


def _classify(job: ReduceJob) -> Done:
    """One chunk's types, as a part with the columns of `crystal_types`."""
    frame = job.raw.frame()
    there = files_there((accepted_part(job.part),))
    if there is not None:
        return Done(len(frame), there)
    batch = stored_batch(frame)
    tolerances = job.settings.tolerances
    lattices = classify_lattices(batch.cells, tolerances, batch.periodicity)
    crystals = classify_crystals(batch, lattices, tolerances)
    ladder = lattices.frame()
    found = crystals.frame()
    standard = pl.DataFrame(
        {
            "row": crystals.rows,
            "standard_cell_angstrom": pl.Series(pl.from_arrow(fixed(crystals.standard.cells))),
            "standard_species": pl.Series(pl.from_arrow(token_lists(crystals.standard))),
            "standard_positions_fractional": pl.Series(
                pl.from_arrow(ragged(crystals.standard.positions, crystals.standard.offsets, 3))
            ),
        }
    )
    failures = pl.DataFrame(
        {
            "row": pl.Series([row for row, _, _ in crystals.failures], dtype=pl.Int64),
            "symmetry_failure": pl.Series([message for _, _, message in crystals.failures], dtype=pl.String),
        }
    )
    prints = column_means(batch, distributions(batch, job.settings.fingerprint_k))
    planes = ("op", "oc", "tp", "hp")
    types = (
        frame.select("crystal_key", pl.col("record_id").alias("typed_record_id"))
        .with_columns(
            pl.Series("row", np.arange(len(frame))),
            pl.Series("mean_distances_angstrom", pl.from_arrow(_by_crystal(prints, job.settings.fingerprint_k))),
            pl.Series("conventional_matrix", pl.from_arrow(fixed(lattices.matrices.astype(np.int32)))),
        )
        .hstack(
            ladder.rename(
                {
                    c: ("plane_strain_to_" if c[7:] in planes else "strain_to_") + c[7:]
                    for c in ladder.columns
                    if c.startswith("ladder_") and c != "ladder_reach"
                }
                | {"ladder_reach": "ladder_reach_strain"}
            )
        )
        .join(found.rename({"group_symbol": "space_group_symbol"}), on="row", how="left")
        .join(standard, on="row", how="left")
        .with_columns(
            pl.struct("space_group", "layer_group")
            .map_elements(_point_group_order, return_dtype=pl.Int32)
            .alias("point_group_order")
        )
        .join(failures, on="row", how="left")
        .sort("row")
    )
    table = types.select(c.name for c in TABLES["crystal_types"].columns).to_arrow()
    return Done(len(frame), (accepted_part(job.part).write(table),))


def _by_crystal(prints: Fingerprint, k: int) -> pa.Array:
    """The mean rows of each crystal, one after the other, as a list column."""
    return pa.LargeListArray.from_arrays(pa.array(prints.offsets * k), pa.array(prints.means.reshape(-1)))


def _point_group_order(groups: dict[str, int | None]) -> int | None:
    if groups["space_group"] is not None:
        return point_group_order(groups["space_group"])
    return point_group_order(groups["layer_group"], layer=True) if groups["layer_group"] is not None else None


def _commit(connection: duckdb.DuckDBPyConnection, part: str, again: bool) -> None:
    """again: there may be rows of these keys."""
    with transaction(connection):
        if again:
            connection.execute(
                "DELETE FROM crystal_types WHERE crystal_key IN (SELECT crystal_key FROM read_parquet(?))", [part]
            )
        connection.execute("INSERT INTO crystal_types SELECT * FROM read_parquet(?)", [part])
