"""Storing: what a run on one core takes beside reading and the work on chunks: parts, commits, counts."""

from __future__ import annotations

from .figures import Options, Report
from .ingest import read_and_reduce, table, whole
from .night import fresh
from .timing import Seconds, each, ratio, reference


def run(options: Options) -> Report:
    """Time a run with one worker, without what it spends in the chunks' work; all records must be in the store."""
    repeat = options.times(3)
    batch, _, _, _ = read_and_reduce(options, 1)
    path, count = table(options), len(batch)
    store = options.scratch / "store-part.duckdb"
    taken = [whole(fresh(store), path, 1, count) for _ in range(repeat)]
    inside = Seconds(tuple(i for _, i in taken))
    beside = Seconds(tuple(s - i for s, i in taken))
    work_store = store.with_name(store.name + ".work") / "work.duckdb"
    theirs = reference(batch, repeat)
    return Report(
        "store",
        {"file": path.name, "structures": count, "store_bytes_per_record": work_store.stat().st_size // count},
        (
            each("parse + reduce + write parts (a worker)", inside, count),
            each("split + commit (the process that drives)", beside, count),
            each("reference", theirs, 1),
            ratio("split + commit", beside, count, theirs),
        ),
    )
