"""A body of steps driven to its end: as a Prefect flow or directly, with progress, and stopped cleanly by Ctrl-C."""

from __future__ import annotations

import os
import sys
from typing import TYPE_CHECKING, Any, NoReturn

from .failures import STOPPED

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from lattice_census.ingest.progress import Progress, Step

    from .progress import BarProgress, PlainProgress, QuietProgress


def drive(
    name: str,
    orchestrator: str,
    quiet: bool,
    store: Path,
    body: Callable[[Step, Progress], dict[str, Any]],
    must_exist: bool = False,
) -> dict[str, Any]:
    """body(step, progress), as a Prefect flow of this name that shows its counts there, or directly; the counts.

    must_exist: StoreError where there is no store, before anything is started.
    """
    from lattice_census.store.connect import has_store, no_store

    from .progress import progress_for

    if must_exist and not has_store(store):
        raise no_store(store)
    with progress_for(quiet) as progress:
        if orchestrator == "direct":
            from lattice_census.ingest.progress import call_directly

            return body(call_directly, progress)
        from .orchestrate import run_as_flow, shown, task_step

        def stoppable() -> dict[str, Any]:
            try:
                return shown(name, store, body(task_step, progress))
            except KeyboardInterrupt:
                _leave(progress)

        return run_as_flow(name, stoppable)


def _leave(progress: PlainProgress | BarProgress | QuietProgress) -> NoReturn:
    """Say how to go on, stop Prefect's temporary server, and end the process with 4.

    Called inside the flow, when everything of ours is closed. Ctrl-C on a terminal reaches the temporary server too,
    and Prefect would go on for a minute trying to tell it about the end.
    """
    from prefect.server.api.server import SubprocessASGIServer

    progress.__exit__(KeyboardInterrupt, None, None)
    print(f"\n{STOPPED}", file=sys.stderr, flush=True)
    for server in list(SubprocessASGIServer._instances.values()):
        server.stop()
    os._exit(4)
