"""Jobs on the workers of a Dask scheduler: tasks on Prefect's Dask task runner, or without Prefect plain futures.

Only names, settings and counts pass through the scheduler; what they stand for lies in the place for parts.
"""

from __future__ import annotations

import contextvars
import logging
import pickle
import threading
import time
import uuid
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from importlib import import_module
from typing import Any, TypeVar

from lattice_census.errors import UsageError, WorkError
from lattice_census.ingest.engine import FEW
from lattice_census.settings import Settings
from lattice_census.store.parts import Part

from .dask_worker import differences, do_job, installed, look_around

J = TypeVar("J")
R = TypeVar("R")
Client = Any
"""distributed.Client, whose methods say nothing of their types."""

log = logging.getLogger(__name__)

AHEAD = 16
"""Jobs that may be done and waiting for one before them, for each thread of the workers."""

TIMES = 3
"""How often a job is given out before its workers' deaths are put down to it."""

PATIENCE_SECONDS = 600.0
"""How long a run waits for a worker when all are gone."""

LOOK_SECONDS = 2.0

CONNECT_SECONDS = 30


@dataclass(slots=True)
class _Flying:
    """A job that was given out."""

    job: Any
    packed: bytes
    name: str
    future: Any
    times: int = 1

    @property
    def on_dask(self) -> Any:
        """Dask's future, inside Prefect's where there is one."""
        return getattr(self.future, "wrapped_future", self.future)


class DaskEngine:
    """Gives jobs to the workers of a scheduler; results come back in order (the interface is ingest/engine.py's)."""

    def __init__(self, client: Client, submit: Callable[[str, bytes], Any], patience: float = PATIENCE_SECONDS) -> None:
        """submit: gives a job out by its kind and its packed form, and returns the future."""
        self._client = client
        self._submit = submit
        self._patience = patience
        self._landed = threading.Event()

    def ordered_results(self, work: Callable[[J], R], jobs: Iterable[J], few: int = FEW) -> Iterator[tuple[J, R]]:
        """(job, work(job)) in the order of the jobs; at most twice as many unfinished ones as the workers have threads.

        A job whose worker dies is given out again. Raises WorkError where its workers die time after time, no worker
        comes for ten minutes, or the scheduler is lost; an error inside `work` as it is.
        """
        kind = work.__name__.strip("_").replace("_", " ")
        coming = iter(jobs)
        flying: deque[_Flying] = deque()
        left = True
        try:
            while left or flying:
                self._landed.clear()
                width = self._width()
                while left and len(flying) < AHEAD * width and _unfinished(flying) < 2 * width:
                    job = next(coming, None)
                    left = job is not None
                    if job is not None:
                        flying.append(self._give_out(kind, job, pickle.dumps((work, job))))
                while flying and flying[0].on_dask.done():
                    if self._again(kind, flying[0]):
                        break
                    first = flying.popleft()
                    yield first.job, self._result(first)
                if flying and not flying[0].on_dask.done():
                    self._landed.wait(LOOK_SECONDS)
        finally:
            if flying:
                self._client.cancel([f.on_dask for f in flying])

    def _give_out(self, kind: str, job: Any, packed: bytes) -> _Flying:
        future = self._submit(kind, packed)
        flown = _Flying(job, packed, str(getattr(job, "part", kind)), future)
        flown.on_dask.add_done_callback(lambda _: self._landed.set())
        return flown

    def _again(self, kind: str, flown: _Flying) -> bool:
        """Give a job out again that was lost with its workers; whether that was done."""
        killed = import_module("distributed").KilledWorker
        if flown.on_dask.status != "error" or not isinstance(flown.on_dask.exception(), killed):
            return False
        if flown.times >= TIMES:
            raise WorkError(
                f"The workers that had the job {flown.name} died each time ({TIMES} times over). If memory is short "
                "there, set a smaller chunk_records; give the same command again to go on."
            )
        log.warning("Workers died over the job %s; it is given out again.", flown.name)
        flown.future = self._submit(kind, flown.packed)
        flown.times += 1
        flown.on_dask.add_done_callback(lambda _: self._landed.set())
        return True

    def _result(self, flown: _Flying) -> Any:
        from concurrent.futures import CancelledError

        try:
            return flown.future.result()
        except CancelledError as error:
            raise self._lost() from error

    def _width(self) -> int:
        """Threads of all workers; waits for a worker where there is none."""
        until = time.monotonic() + self._patience
        told = False
        while True:
            if self._client.status != "running":
                raise self._lost()
            try:
                threads = int(sum(self._client.nthreads().values()))
            except (OSError, TimeoutError) as error:
                raise self._lost() from error
            if threads:
                return threads
            if time.monotonic() > until:
                raise WorkError(
                    "No worker is connected to the Dask scheduler. Start some; the same command goes on where it was."
                )
            if not told:
                log.warning("All workers are gone; waiting for one.")
                told = True
            time.sleep(LOOK_SECONDS)

    def _lost(self) -> WorkError:
        return WorkError(
            "The Dask scheduler does not answer any more. Nothing is lost: start it and its workers, and give the same "
            "command again to go on."
        )


def _unfinished(flying: Iterable[_Flying]) -> int:
    return sum(not f.on_dask.done() for f in flying)


@contextmanager
def dask_engine(settings: Settings, place: str) -> Iterator[DaskEngine]:
    """The engine of a run, once all workers are found to have the same versions and to see the place for parts.

    In a Prefect flow every job is a task of it, on Prefect's Dask task runner. Without `scheduler` in the settings,
    worker processes are started on this machine and end with the run. Raises UsageError naming the worker that cannot
    take part, WorkError where no scheduler or worker answers.
    """
    try:
        distributed = import_module("distributed")
        import_module("prefect_dask")
    except ImportError as error:
        raise UsageError("--engine dask needs more packages: pip install 'lattice-census[dask]'.") from error
    for name in ("distributed", "dask"):
        logging.getLogger(name).setLevel(logging.ERROR)
    with ExitStack() as stack:
        server = _prefect_server(stack) if settings.orchestrator == "prefect" else None
        try:
            if server is not None:
                client, submit = _through_prefect(stack, settings)
            else:
                client = stack.enter_context(distributed.Client(**_cluster(stack, settings), set_as_default=False))
                submit = _through_dask(client)
            client.wait_for_workers(1, timeout=CONNECT_SECONDS)
        except (OSError, TimeoutError) as error:
            where = settings.scheduler or "this machine"
            raise WorkError(
                f"No Dask scheduler with a worker answers at {where} ({error}). Start `dask scheduler` and "
                "`dask worker`, and give its address as --scheduler."
            ) from error
        _examine(client, place, server)
        yield DaskEngine(client, submit)


def _local(settings: Settings) -> dict[str, Any]:
    """Workers on this machine: processes of one thread, without a dashboard, reachable from here alone."""
    return {
        "n_workers": settings.worker_count,
        "threads_per_worker": 1,
        "processes": True,
        "host": "127.0.0.1",
        "dashboard_address": None,
        "silence_logs": logging.CRITICAL,
    }


def _cluster(stack: ExitStack, settings: Settings) -> dict[str, Any]:
    if settings.scheduler:
        return {"address": settings.scheduler, "timeout": CONNECT_SECONDS}
    return {"address": stack.enter_context(import_module("distributed").LocalCluster(**_local(settings)))}


def _through_dask(client: Client) -> Callable[[str, bytes], Any]:
    expected = installed()
    return lambda kind, packed: client.submit(do_job, expected, packed, pure=False, key=_key(kind))


def _key(kind: str) -> str:
    return f"{kind}-{uuid.uuid4().hex}"


def _prefect_server(stack: ExitStack) -> str | None:
    """Where the server of the flow around is, None outside of a flow. Tasks elsewhere are told of it."""
    from prefect.client.orchestration import get_client
    from prefect.context import FlowRunContext
    from prefect.settings import PREFECT_API_URL, temporary_settings

    if FlowRunContext.get() is None:
        return None
    with get_client(sync_client=True) as client:
        url = str(client.api_url)
    stack.enter_context(temporary_settings({PREFECT_API_URL: url}))
    return url


def _through_prefect(stack: ExitStack, settings: Settings) -> tuple[Client, Callable[[str, bytes], Any]]:
    from prefect import task
    from prefect.cache_policies import NO_CACHE

    task_runner = import_module("prefect_dask").DaskTaskRunner
    if settings.scheduler:
        runner = task_runner(address=settings.scheduler, client_kwargs={"timeout": CONNECT_SECONDS})
    else:
        runner = task_runner(cluster_kwargs=_local(settings))
    stack.enter_context(runner)
    client = runner.client
    # Given out from the flow itself, also while one of its steps runs: a task inside a step would carry the step with
    # it, and with that the open store.
    flow = contextvars.copy_context()
    expected = installed()

    def submit(kind: str, packed: bytes) -> Any:
        made: Any = task(name=kind, cache_policy=NO_CACHE, persist_result=False)(do_job)
        return flow.run(runner.submit, made, {"expected": expected, "packed": packed})

    return client, submit


def _examine(client: Client, place: str, server: str | None) -> None:
    """Raise UsageError naming the first machine that cannot take part, and why."""
    here = installed()
    try:
        _same_versions("scheduler", client.run_on_scheduler(installed), here)
    except UsageError:
        raise
    except Exception as error:  # whatever the other end has instead of our package
        raise UsageError(
            f"The Dask scheduler cannot load lattice-census ({error}): install it there too, "
            f"in version {here['lattice-census']} with the extra dask."
        ) from error
    mark = f"mark-{uuid.uuid4().hex[:12]}"
    seen = Part(place, mark)
    seen.put(mark.encode())
    try:
        told = client.run(look_around, place, mark, server, on_error="return")
        for worker in sorted(told):
            answer = told[worker]
            if isinstance(answer, BaseException):
                raise UsageError(
                    f"The worker {worker} cannot load lattice-census ({answer}): install it there, "
                    f"in version {here['lattice-census']} with the extra dask."
                )
            _same_versions(f"worker {worker} on {answer['host']}", answer["installed"], here)
            if answer["place"] is None:
                back = Part(place, answer["answer"])
                if not back.exists():
                    answer["place"] = "what it writes does not arrive here"
                back.unlink()
            if answer["place"] is not None:
                raise UsageError(
                    f"The worker {worker} on {answer['host']} cannot use the place for parts {place}: "
                    f"{answer['place']}. Give --parts a folder or URL that every worker can read and write."
                )
            if answer["server"] is not None:
                raise UsageError(
                    f"The worker {worker} on {answer['host']} does not reach the Prefect server at {server} "
                    f"({answer['server']}). Start a server that it reaches and set PREFECT_API_URL to it, or give "
                    "--direct to do without Prefect."
                )
    finally:
        seen.unlink()


def _same_versions(who: str, there: dict[str, str], here: dict[str, str]) -> None:
    wrong = differences(there, here)
    if wrong:
        raise UsageError(f"The {who} has other versions: {'; '.join(wrong)}. Install the same ones everywhere.")
