"""One pool of spawned workers; jobs go in and results come out in order, a bounded number in flight."""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from itertools import chain, islice
from multiprocessing.resource_tracker import ensure_running
from types import TracebackType
from typing import TypeVar

from ..errors import WorkError
from .engine import FEW

J = TypeVar("J")
R = TypeVar("R")


def _leave_with_parent(parent: int) -> None:
    """End this worker when the process that made it is gone (a kill leaves no time to tell the workers)."""

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(0.25)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


@contextmanager
def _deaf_to_interruption() -> Iterator[None]:
    """Processes made inside never see Ctrl-C, which is for the one that drives them: a mask of signals is inherited."""
    ensure_running()  # else the start of the first process makes one that ends with the mask taken off
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


class WorkerPool:
    """The pool of a run: made when it is first needed, kept until the run ends. Use as a context."""

    def __init__(self, workers: int) -> None:
        """workers: number of processes; 1 means this process itself."""
        self._workers = workers
        self._executor: ProcessPoolExecutor | None = None

    def __enter__(self) -> WorkerPool:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if self._executor is not None:
            # Nothing is waited for: after the last result no job is in flight, after an error nobody wants those that
            # are, and a part that is not whole has no name. Left to themselves, idle workers take half a second to end.
            for process in multiprocessing.active_children():
                process.kill()
            self._executor.shutdown(wait=True, cancel_futures=True)
            self._executor = None

    def ordered_results(self, work: Callable[[J], R], jobs: Iterable[J], few: int = FEW) -> Iterator[tuple[J, R]]:
        """(job, work(job)) in the order of the jobs; at most 4 x workers jobs are in flight.

        `work` and the jobs must be picklable and small: paths and ids, no arrays. Up to `few` jobs are done in this
        process where there are no workers yet: making them would take longer. Raises WorkError when a worker dies; an
        error inside `work` as it is.
        """
        coming = iter(jobs)
        ahead = [] if self._executor is not None else list(islice(coming, few + 1))
        if self._workers == 1 or (len(ahead) <= few and self._executor is None):
            for job in chain(ahead, coming):
                yield job, work(job)
            return
        flying: deque[tuple[J, Future[R]]] = deque()
        try:
            for job in chain(ahead, coming):
                with _deaf_to_interruption():
                    future = self._processes().submit(work, job)
                flying.append((job, future))
                # What is done is handed out before more is asked for, else it would pile up until the end.
                while flying and (flying[0][1].done() or len(flying) >= 4 * self._workers):
                    first, future = flying.popleft()
                    yield first, future.result()
            while flying:
                first, future = flying.popleft()
                yield first, future.result()
        except BrokenProcessPool as error:
            raise WorkError(
                "A worker process ended unexpectedly (killed, or out of memory). Nothing is lost: give the same "
                "command again to go on, if memory is short with a smaller chunk_records or workers."
            ) from error

    def _processes(self) -> ProcessPoolExecutor:
        if self._executor is None:
            # Spawn, not fork: a forked child of a process with threads (numba, Polars, DuckDB) may hang.
            self._executor = ProcessPoolExecutor(
                self._workers,
                multiprocessing.get_context("spawn"),
                initializer=_leave_with_parent,
                initargs=(os.getpid(),),
            )
        return self._executor
