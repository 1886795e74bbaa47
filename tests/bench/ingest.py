"""Read, reduce and store: each alone on one core, and all three on one and two cores, against the reference.

Start-up (compiling kernels, making workers, a new store) is left out; classification has its own part.
"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path
from typing import Any

import polars as pl

from lattice_census.cell.canonical import canonicalise
from lattice_census.ingest.ingest import prepare_ingest, read_source
from lattice_census.ingest.pool import WorkerPool
from lattice_census.ingest.progress import Silent
from lattice_census.ingest.scan import IngestRequest, scan
from lattice_census.ingest.split import raw_chunks
from lattice_census.kernels import warm_up
from lattice_census.model.raw import ParseOptions
from lattice_census.readers import reader_named
from lattice_census.settings import resolve_settings
from lattice_census.store.rows import one_number
from lattice_census.store.workspace import Workspace
from tests.tables_of_structures import crystals, rows_of, write_csv

from .timing import against, reference_seconds, summary, timed


def run(file: Path | None, repeat: int) -> dict[str, Any]:
    """Times of the parts on `file`, or on 2,000 invented structures of 9 sites."""
    warm_up()
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        path = file or write_csv(folder / "invented.csv", rows_of(crystals(2000, sites=9)))
        settings = resolve_settings({"orchestrator": "direct"}, {})
        with Workspace(folder / "scan.duckdb", "bench") as workspace:
            source = scan(workspace.connection, IngestRequest((path,)), settings).sources[0]

        def read() -> Any:
            raw = pl.concat([chunk.records for chunk in raw_chunks(source, settings)])
            return reader_named(raw["reader"][0]).parse(raw["text"].to_list(), ParseOptions())

        parsed, read_time = timed(read, repeat)
        batch = parsed.batch
        canonical, reduce_time = timed(lambda: canonicalise(batch, settings.tolerances), repeat)
        reference = reference_seconds(batch)
        count = len(batch)
        one = summary([_whole(folder / f"one-{i}.duckdb", path, 1, count) for i in range(repeat)])
        two = summary([_whole(folder / f"two-{i}.duckdb", path, 2, count) for i in range(repeat)])
        store_time = {k: max(one[k] - read_time[k] - reduce_time[k], 0.0) for k in one}
        return {
            "file": path.name,
            "structures": count,
            "sites_mean": float(len(batch.species) / count),
            "distinct_keys": len(set(canonical.crystal_key)),
            "reference_us_per_structure": reference * 1e6,
            "read": against(reference, read_time, count),
            "reduce": against(reference, reduce_time, count),
            "store": against(reference, store_time, count),
            "read_reduce_store_one_core": against(reference, one, count),
            "read_reduce_store_two_cores": against(reference, two, count),
        }


def _whole(store: Path, path: Path, workers: int, count: int) -> float:
    """Seconds from the opened file to committed rows, with workers that are already there."""
    chunk = max(50, min(2000, count // (4 * workers)))
    settings = resolve_settings({"orchestrator": "direct", "workers": workers, "chunk_records": chunk}, {})
    with Workspace(store, "bench") as workspace, WorkerPool(workers) as pool:
        # The workers are made, and their kernels loaded, by a first run on a small table.
        small = write_csv(store.with_suffix(".csv"), rows_of(crystals(8 * workers, sites=4)))
        tiny = settings.model_copy(update={"chunk_records": 1})
        for request, of_run in ((IngestRequest((small,)), tiny), (IngestRequest((path,)), settings)):
            work = prepare_ingest(workspace, request, of_run, "bench")
            assert work is not None
            begun = time.perf_counter()
            read_source(workspace, work, work.plan.sources[0], pool, Silent())
            seconds = time.perf_counter() - begun
        assert one_number(workspace.connection, "SELECT count(*) FROM records") == count + 8 * workers
    return seconds
