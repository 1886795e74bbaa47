"""A whole night on a collection with a known answer: time by stage, peak memory, size of the store, and the groups."""

from __future__ import annotations

from typing import Any

import duckdb

from lattice_census.output.check import check_store

from . import night
from .collection import Kind, truth
from .figures import Figure, Options, Report
from .known_answer import FOUND, check_answer
from .night import Night, fresh, run_night
from .timing import Seconds

AUDITED = 200
"""Witnesses that are rebuilt from the structures as they came, of matches and of equal keys each."""


def run(options: Options) -> Report:
    """Run `run` on the collection, and compare its groups with the known answer; of a file, check the store alone."""
    count = options.count(20_000)
    repeat = options.times(3 if count <= 20_000 else 1)
    if options.file is None:
        nights = night.nights(options.scratch, Kind(), count, options.workers, repeat)
    else:
        store = options.scratch / "end-to-end.duckdb"
        nights = tuple(run_night(options.file, fresh(store), options.workers) for _ in range(repeat))
    last = nights[-1]
    found = last.counts["ingest"]["accepted"]
    figures = [
        Seconds(tuple(n.seconds for n in nights)).figure("night"),
        Seconds(tuple(n.work_s for n in nights)).figure("night, start-up apart"),
        Seconds(tuple(n.work_s for n in nights)).figure("night, start-up apart", "us/record", 1e6 / found),
        Seconds(tuple(n.processor_s for n in nights)).figure("processor time"),
        memory_figure(nights, 4.0 if count >= 1_000_000 else None),
        Figure("store", last.store_bytes / 2**20, "MiB"),
        Figure("store", last.store_bytes / found, "bytes/record"),
    ]
    figures += [Figure(f"stage: {name}", seconds, "s") for name, seconds in last.stages.items()]
    details: dict[str, Any] = {"counts": last.counts, "processor_stages_s": last.processor_stages}
    if options.file is None:
        answer = check_answer(last.store, count, len(set(truth(Kind(), 0, count).tolist())))
        figures += [
            Figure("families of different crystals", answer.merged_wrongly, "families", reach=0),
            Figure("copies found", 100 * answer.found, "%", reach=100 * FOUND, at_least=True),
            Figure("copies set aside", 100 * answer.set_aside, "%"),
        ]
        details["answer"] = answer.as_json()
    sound(last)
    return Report(
        "end-to-end",
        {"records": found, "workers": options.workers, "processes": last.peak_processes, "memory as": last.measure},
        tuple(figures),
        details,
    )


def memory_figure(nights: tuple[Night, ...], reach: float | None = None) -> Figure:
    """Peak memory of the process and its workers."""
    return Seconds(tuple(float(n.peak_bytes) for n in nights)).figure("peak memory", "GiB", 2**-30, reach)


def sound(done: Night) -> None:
    """Raises AssertionError where the store breaks an invariant."""
    connection = duckdb.connect(str(done.store), read_only=True)
    try:
        broken = [f"{o.name}: {o.failures}" for o in check_store(connection, AUDITED) if o.failures]
    finally:
        connection.close()
    assert not broken, "the store breaks " + ", ".join(broken)
