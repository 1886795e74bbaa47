"""One night in a process of its own, timed step by step: `python -m tests.bench.night_child JSON`; JSON on stdout."""

from __future__ import annotations

import json
import resource
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any


def main() -> None:
    """Run `ingest`, `group` and `keep` as the command `run` does, without an orchestrator."""
    begun = time.perf_counter()
    asked = json.loads(sys.argv[1])
    from lattice_census.flows.group import night
    from lattice_census.flows.ingest import IngestJob
    from lattice_census.ingest.progress import Silent
    from lattice_census.ingest.scan import IngestRequest
    from lattice_census.settings import resolve_settings

    stages: dict[str, float] = {"imports": time.perf_counter() - begun}

    def step(name: str, work: Callable[..., Any], *arguments: Any) -> Any:
        started = time.perf_counter()
        try:
            return work(*arguments)
        finally:
            name = "read" if name.startswith("read ") else name
            stages[name] = stages.get(name, 0.0) + time.perf_counter() - started

    settings = resolve_settings({"orchestrator": "direct", **asked["settings"]}, {})
    job = IngestJob(Path(asked["store"]), IngestRequest((Path(asked["path"]),)), settings)
    counts = night(job, step, Silent())
    whole = time.perf_counter() - begun
    stages["the rest"] = whole - sum(stages.values())
    processor = sum(
        u.ru_utime + u.ru_stime for u in map(resource.getrusage, (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN))
    )
    print(json.dumps({"seconds": whole, "processor_s": processor, "stages": stages, "counts": counts}))


if __name__ == "__main__":
    main()
