"""Read, reduce and store: each alone on one core, and all three on one and two cores, against the reference.

Start-up (compiling kernels, making workers, a new store) is left out; classification has its own part.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path
from typing import Any, TypeVar

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

from .collection import Kind, write_table
from .figures import Figure, Options, Report
from .night import fresh
from .timing import Seconds, each, ratio, reference, timed

J = TypeVar("J")
R = TypeVar("R")

FEW, MANY = 2000, 10_000
"""Records of a table, unless asked for; many where two workers are to have chunks of ordinary size."""


def run(options: Options) -> Report:
    """Times of the parts, and of the whole with one worker and with two."""
    repeat = options.times(3)
    batch, _, read, reduced = read_and_reduce(options, repeat, MANY)
    theirs, count = reference(batch, repeat), len(batch)
    path = table(options, MANY)
    one, two = (_repeated(options.scratch, path, workers, count, repeat) for workers in (1, 2))
    return Report(
        "ingest",
        {"file": path.name, "structures": count, "sites_mean": f"{len(batch.species) / count:.4g}"},
        (
            each("read", read, count),
            each("reduce", reduced, count),
            each("read + reduce + store, one core", one[0], count),
            each("read + reduce + store, two cores", two[0], count),
            each("reference", theirs, 1),
            ratio("read + reduce + store, one core", one[0], count, theirs),
            ratio("read + reduce + store, two cores", two[0], count, theirs, 0.4),
            Figure("one core / two cores", one[0].median / two[0].median, "x"),
        ),
    )


def table(options: Options, default: int = FEW) -> Path:
    """The file asked for, or an invented table of CIF texts, made once."""
    if options.file is not None:
        return options.file
    count = options.count(default)
    path = options.scratch / f"table-{count}.csv"
    return path if path.exists() else write_table(path, Kind(), 0, count)


def read_and_reduce(options: Options, repeat: int, default: int = FEW) -> tuple[Any, Any, Seconds, Seconds]:
    """(parsed batch, canonical crystals, seconds to read the table, seconds to reduce), one core."""
    warm_up()
    path = table(options, default)
    settings = resolve_settings({"orchestrator": "direct"}, {})
    with Workspace(fresh(options.scratch / "scan.duckdb"), "bench") as workspace:
        source = scan(workspace.connection, IngestRequest((path,)), settings).sources[0]

    def read() -> Any:
        raw = pl.concat([chunk.records for chunk in raw_chunks(source, settings)])
        return reader_named(raw["reader"][0]).parse(raw["text"].to_list(), ParseOptions())

    parsed, read_time = timed(read, repeat)
    if options.file is None:
        assert len(parsed.batch) == options.count(default), f"only {len(parsed.batch)} records could be read"
    canonical, reduce_time = timed(lambda: canonicalise(parsed.batch, settings.tolerances), repeat)
    return parsed.batch, canonical, read_time, reduce_time


class PoolWithClock(WorkerPool):
    """A pool that adds up the seconds spent in the work itself, where it is done in this process."""

    inside = 0.0

    def ordered_results(self, work: Callable[[J], R], jobs: Iterable[J], few: int = 4) -> Iterator[tuple[J, R]]:
        """As the pool does it."""
        if self._workers > 1:
            yield from super().ordered_results(work, jobs, few)
            return
        for job in jobs:
            begun = time.perf_counter()
            done = work(job)
            self.inside += time.perf_counter() - begun
            yield job, done


def _repeated(scratch: Path, path: Path, workers: int, count: int, repeat: int) -> tuple[Seconds, Seconds]:
    """(whole, whole without the work of the chunks) of read_source."""
    taken = [whole(fresh(scratch / f"ingest-{workers}.duckdb"), path, workers, count) for _ in range(repeat)]
    return Seconds(tuple(t for t, _ in taken)), Seconds(tuple(t - inside for t, inside in taken))


def whole(store: Path, path: Path, workers: int, count: int) -> tuple[float, float]:
    """Seconds from the opened file to committed rows, with workers that are already there; and those inside the work
    of the chunks, where there is one worker."""
    chunk = max(50, min(2000, count // (4 * workers)))
    settings = resolve_settings({"orchestrator": "direct", "workers": workers, "chunk_records": chunk}, {})
    few = 8 * workers
    with Workspace(store, "bench") as workspace, PoolWithClock(workers) as pool:
        # The workers are made, and their kernels loaded, by a first run on a small table.
        small = write_table(store.with_suffix(".csv"), Kind(seed=2), 0, few)
        tiny = settings.model_copy(update={"chunk_records": 1})
        for request, of_run in ((IngestRequest((small,)), tiny), (IngestRequest((path,)), settings)):
            work = prepare_ingest(workspace, request, of_run, "bench")
            assert work is not None
            pool.inside = 0.0
            begun = time.perf_counter()
            read_source(workspace, work, work.plan.sources[0], pool, Silent())
            seconds = time.perf_counter() - begun
        stored = one_number(workspace.connection, "SELECT count(*) FROM records") - few
        assert stored == count, f"{stored} records are in the store, not {count}"
    return seconds, pool.inside
