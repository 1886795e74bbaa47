"""One night in a process of its own, timed step by step: `python -m tests.bench.night_child JSON`; JSON on stdout."""

from __future__ import annotations

import json
import resource
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any


def ready(number: int) -> int:
    """Let a worker load the kernels and the libraries, and hold it long enough for the others to get their turn."""
    import gemmi  # noqa: F401

    from lattice_census.grouping import work  # noqa: F401
    from lattice_census.ingest import classify, reduce  # noqa: F401
    from lattice_census.kernels import warm_up
    from lattice_census.readers import cif, table_csv  # noqa: F401

    warm_up()
    time.sleep(0.2)
    return number


def main() -> None:
    """Run `ingest`, `group` and `keep` as the command `run` does, without an orchestrator.

    With `ready_workers` the workers are started before the first stage, as the stage `start workers`.
    """
    begun = time.perf_counter()
    asked = json.loads(sys.argv[1])
    from lattice_census.flows import engine
    from lattice_census.flows.group import night
    from lattice_census.flows.ingest import IngestJob
    from lattice_census.ingest.pool import WorkerPool
    from lattice_census.ingest.progress import Silent
    from lattice_census.ingest.scan import IngestRequest
    from lattice_census.settings import resolve_settings

    stages: dict[str, float] = {"imports": time.perf_counter() - begun}
    processor: dict[str, float] = {"imports": time.process_time()}

    class ReadyPool(WorkerPool):
        """A pool whose workers are there when it is entered."""

        def __enter__(self) -> WorkerPool:
            started = time.perf_counter()
            super().__enter__()
            list(self.ordered_results(ready, range(4 * self._workers), few=0))
            stages["start workers"] = time.perf_counter() - started
            return self

    if asked["ready_workers"]:
        assert engine.WorkerPool is WorkerPool
        engine.WorkerPool = ReadyPool  # type: ignore[misc]

    def step(name: str, work: Callable[..., Any], *arguments: Any) -> Any:
        started, busy = time.perf_counter(), time.process_time()
        try:
            return work(*arguments)
        finally:
            name = "read" if name.startswith("read ") else name
            stages[name] = stages.get(name, 0.0) + time.perf_counter() - started
            processor[name] = processor.get(name, 0.0) + time.process_time() - busy

    settings = resolve_settings({"orchestrator": "direct", **asked["settings"]}, {})
    job = IngestJob(Path(asked["store"]), IngestRequest((Path(asked["path"]),)), settings)
    counts = night(job, step, Silent())
    whole = time.perf_counter() - begun
    stages["the rest"] = whole - sum(stages.values())
    used = sum(
        u.ru_utime + u.ru_stime for u in map(resource.getrusage, (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN))
    )
    told = {"seconds": whole, "processor_s": used, "stages": stages, "processor_stages": processor, "counts": counts}
    print(json.dumps(told))


if __name__ == "__main__":
    main()
