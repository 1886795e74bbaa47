"""Read, reduce and store: each alone on one core, and the whole ingest on two, against the reference."""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import Any

import polars as pl

from lattice_census.cell.canonical import canonicalise
from lattice_census.flows.ingest import IngestJob
from lattice_census.flows.ingest import ingest as ingest_steps
from lattice_census.ingest.progress import Silent, call_directly
from lattice_census.ingest.scan import IngestRequest, scan
from lattice_census.ingest.split import raw_chunks
from lattice_census.kernels import warm_up
from lattice_census.model.raw import ParseOptions
from lattice_census.readers import reader_named
from lattice_census.settings import Settings, resolve_settings
from lattice_census.store.workspace import Workspace
from tests.tables_of_structures import crystals, rows_of, write_csv

from .timing import against, reference_seconds, timed


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
            chunks = list(raw_chunks(source, settings))
            raw = pl.concat([chunk.records for chunk in chunks])
            return reader_named(raw["reader"][0]).parse(raw["text"].to_list(), ParseOptions())

        parsed, read_time = timed(read, repeat)
        batch = parsed.batch
        canonical, reduce_time = timed(lambda: canonicalise(batch, settings.tolerances), repeat)
        reference = reference_seconds(batch)
        count = len(batch)

        stores = iter(range(10_000))

        def whole(workers: int) -> Any:
            job = IngestJob(folder / f"{next(stores)}.duckdb", IngestRequest((path,)), settings_with(workers))
            return ingest_steps(job, call_directly, Silent())

        counts, one = timed(lambda: whole(1), repeat)
        assert counts["accepted"] == count and counts["rejected"] == len(parsed.refusals)
        counts, two = timed(lambda: whole(2), repeat)
        assert counts["accepted"] == count
        store_time = {k: max(one[k] - read_time[k] - reduce_time[k], 0.0) for k in one}
        return {
            "file": path.name,
            "structures": count,
            "sites_mean": float(len(batch.species) / count),
            "distinct_keys": len(set(canonical.crystal_key)),
            "reference_us_per_structure": reference * 1e6,
            "read": against(reference, read_time, count),
            "reduce": against(reference, reduce_time, count),
            "store_on_one_core": against(reference, store_time, count),
            "whole_on_one_core": against(reference, one, count),
            "whole_on_two_cores": against(reference, two, count),
        }


def settings_with(workers: int) -> Settings:
    """Default settings with so many workers, chunks small enough for two workers to share."""
    return resolve_settings({"orchestrator": "direct", "workers": workers, "chunk_records": 500}, {})
