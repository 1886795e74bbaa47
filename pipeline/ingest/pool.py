"""One pool of spawned workers; jobs go in and results come out in order, a bounded number in flight."""

from __future__ import annotations

import multiprocessing
import os
import threading
import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from typing import TypeVar

from ..errors import WorkError

J = TypeVar("J")
R = TypeVar("R")


def _leave_with_parent(parent: int) -> None:
    """End this worker when the process that made it is gone (a kill leaves no time to tell the workers)."""

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(0.25)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


def ordered_results(work: Callable[[J], R], jobs: Iterable[J], workers: int) -> Iterator[tuple[J, R]]:
    """(job, work(job)) in the order of the jobs; at most 2 x workers jobs are in flight.

    `work` and the jobs must be picklable and small: paths and ids, no arrays. One worker means this process itself.
    Raises WorkError when a worker dies; an error inside `work` is raised as it is.
    """
    if workers == 1:
        for job in jobs:
            yield job, work(job)
        return
    # Spawn, not fork: a forked child of a process with threads (numba, Polars, DuckDB) may hang.
    pool = ProcessPoolExecutor(
        workers, multiprocessing.get_context("spawn"), initializer=_leave_with_parent, initargs=(os.getpid(),)
    )
    flying: deque[tuple[J, Future[R]]] = deque()
    try:
        for job in jobs:
            flying.append((job, pool.submit(work, job)))
            if len(flying) >= 2 * workers:
                first, future = flying.popleft()
                yield first, future.result()
        while flying:
            first, future = flying.popleft()
            yield first, future.result()
    except BrokenProcessPool as error:
        raise WorkError(
            "A worker process ended unexpectedly (killed, or out of memory). Nothing is lost: give the same command "
            "again to go on, if memory is short with a smaller chunk_records or workers."
        ) from error
    finally:
        pool.shutdown(wait=True, cancel_futures=True)
