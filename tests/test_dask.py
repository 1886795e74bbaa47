"""Workers elsewhere: the store of a run on a Dask scheduler is that of one process, whatever dies on the way."""

from __future__ import annotations

import os
import pickle
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from concurrent.futures import CancelledError
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice_census.errors import UsageError, WorkError
from lattice_census.flows.group import night
from lattice_census.flows.ingest import IngestJob
from lattice_census.grouping import jobs
from lattice_census.ingest.progress import Silent, call_directly
from lattice_census.ingest.scan import IngestRequest
from lattice_census.settings import resolve_settings

from . import strategies
from .dask_cluster import Cluster
from .tables_of_structures import crystals, query, rows_of, whole_store, write_csv

distributed = pytest.importorskip("distributed", reason="the extra `dask` is not installed")
pytest.importorskip("prefect_dask", reason="the extra `dask` is not installed")

from lattice_census.flows import dask_engine, dask_worker  # noqa: E402

ELEMENTS = (("Si", "O"), ("Ga", "N"), ("C",), ("Mg", "O", "F"), ("Na", "Cl"), ("Ti", "O"), ("Al",), ("Zn", "S"))


def collection(folder: Path) -> Path:
    """A table of 320 records: 80 crystals of eight compositions, each four times in disguise and with noise."""
    rng = np.random.default_rng(11)
    listed = []
    for i in range(80):
        base = strategies.random_crystal(rng, strategies.LATTICE_TYPES[i % 14], 4, ELEMENTS[i % 8])
        listed += [strategies.disguise(rng, base, 1 + k % 3, noise=0.004 * k, strain=0.0003 * k) for k in range(4)]
    rows = rows_of(listed)
    rows[17]["cif"] = "data_broken\n_cell_length_a 3\n"
    return write_csv(folder / "t.csv", rows)


class When(Silent):
    """Calls something once in a stage, when so many of its records are done."""

    def __init__(self, **acts: tuple[int, Callable[[], None]]) -> None:
        """acts: first word of a stage -> (records, what is called)."""
        self._acts, self._stage, self._done = acts, "", 0

    def start(self, stage: str, total: int | None) -> None:
        self._stage, self._done = stage.split()[0], 0

    def advance(self, records: int) -> None:
        self._done += records
        records_then, act = self._acts.get(self._stage, (10**9, None))
        if act is not None and self._done >= records_then:
            del self._acts[self._stage]
            act()

    @property
    def left(self) -> list[str]:
        """Stages in which nothing was called."""
        return list(self._acts)


def run_night(table: Path, store: Path, progress: Silent | None = None, **options: Any) -> dict[str, Any]:
    """Ingest, group and keep without an orchestrator."""
    settings = resolve_settings({"workers": 1, "orchestrator": "direct", "chunk_records": 20, **options}, {})
    return night(IngestJob(store, IngestRequest((table,)), settings), call_directly, progress or Silent())


def same_stores(one: Path, other: Path, *but: str) -> None:
    """Every table is equal but for runs, whose settings say where the work was done, and those named."""
    first, second = whole_store(one), whole_store(other)
    assert first.keys() == second.keys()
    for table in first:
        if table not in ("runs", *but):
            assert first[table] == second[table], table


def test_a_store_made_by_workers_that_die_is_that_of_one_process(tmp_path: Path, monkeypatch):
    """Two workers; one is killed half-way of reading and the other half-way of grouping, and others take over."""
    monkeypatch.setattr(jobs, "MOST_RECORDS", 40)
    table, one, other = collection(tmp_path), tmp_path / "one.duckdb", tmp_path / "other.duckdb"
    parts = tmp_path / "shared"
    with Cluster(tmp_path) as cluster:
        cluster.add_worker()
        cluster.add_worker()

        def replace() -> None:
            cluster.add_worker()
            cluster.kill_worker()

        progress = When(reading=(160, cluster.kill_worker), comparing=(100, replace))
        elsewhere = {"engine": "dask", "scheduler": cluster.address, "parts": str(parts)}
        counts = run_night(table, other, progress, **elsewhere)
        assert not progress.left and [w.poll() is None for w in cluster.workers] == [False, False, True]
        assert run_night(table, other, **elsewhere)["group"] == {"nothing_new": True}
    assert counts["ingest"]["accepted"] == 319 and counts["group"]["families"]["near"] == 80
    run_night(table, one)
    same_stores(one, other)
    assert not [p for p in parts.rglob("*") if p.is_file()]

    monkeypatch.setattr(jobs, "MOST_RECORDS", 10_000)
    third = tmp_path / "third.duckdb"
    run_night(table, third, chunk_records=77)
    same_stores(other, third, "chunks")


@pytest.mark.slow
def test_the_command_runs_the_flow_on_a_scheduler(tmp_path: Path):
    """As a person types it, with Prefect: every job is a task of the flow."""
    table, one, other = collection(tmp_path), tmp_path / "one.duckdb", tmp_path / "other.duckdb"
    run_night(table, one)
    with Cluster(tmp_path) as cluster:
        cluster.add_worker()
        cluster.add_worker()
        command = [sys.executable, "-c", "from lattice_census.flows.cli import main; main()", "run", str(table)]
        where = ["--engine", "dask", "--scheduler", cluster.address, "--parts", str(tmp_path / "shared")]
        done = subprocess.run(
            [*command, "--store", str(other), *where, "--set", "chunk_records=80"],
            capture_output=True,
            text=True,
            timeout=240,
            env={**os.environ, "PREFECT_HOME": str(tmp_path / "prefect"), "LATTICE_CENSUS_DEBUG": "1"},
        )
    assert done.returncode == 0, done.stderr
    assert "319 accepted + 1 refused" in done.stdout and "Grade near: 80 families" in done.stdout
    same_stores(one, other, "chunks")


@pytest.mark.slow
def test_without_a_scheduler_workers_are_started_here(tmp_path: Path):
    table, one, other = collection(tmp_path), tmp_path / "one.duckdb", tmp_path / "other.duckdb"
    run_night(table, one)
    run_night(table, other, engine="dask", workers=2)
    same_stores(one, other)


class Future:
    """What the engine asks of a future; ends when it is told to."""

    def __init__(self, packed: bytes) -> None:
        self.packed, self.status, self.error = packed, "pending", None
        self._calls: list[Callable[[Any], None]] = []

    def done(self) -> bool:
        return self.status != "pending"

    def add_done_callback(self, call: Callable[[Any], None]) -> None:
        self._calls.append(call)

    def end(self, error: BaseException | None = None) -> None:
        self.error, self.status = error, "error" if error else "finished"
        for call in self._calls:
            call(self)

    def exception(self) -> BaseException | None:
        return self.error

    def result(self) -> Any:
        if self.error:
            raise self.error
        work, job = pickle.loads(self.packed)
        return work(job)


class Workers:
    """A client with so many threads of workers, whose jobs end in the order that `turn` picks."""

    def __init__(self, threads: int, turn: Callable[[list[Future]], int] = lambda _: 0) -> None:
        self.threads, self.turn, self.status = threads, turn, "running"
        self.flying: list[Future] = []
        self.most = self.given = 0
        self.cancelled: list[Future] = []
        self.deaths: dict[int, int] = {}
        """Job -> how many more times its worker dies."""

    def submit(self, kind: str, packed: bytes) -> Future:
        future = Future(packed)
        self.flying.append(future)
        self.given += 1
        self.most = max(self.most, len(self.flying))
        return future

    def nthreads(self) -> dict[str, int]:
        """The engine asks before each look: one more job has ended by then."""
        if self.flying:
            self.land()
        return {"here": self.threads} if self.threads else {}

    def land(self) -> None:
        future = self.flying.pop(self.turn(self.flying) % len(self.flying))
        job = pickle.loads(future.packed)[1]
        if self.deaths.get(job, 0):
            self.deaths[job] -= 1
            future.end(distributed.KilledWorker(str(job), None, 3))
        else:
            future.end()

    def cancel(self, futures: list[Future]) -> None:
        self.cancelled += futures


@pytest.fixture(autouse=True)
def impatient(monkeypatch) -> Iterator[None]:
    monkeypatch.setattr(dask_engine, "LOOK_SECONDS", 0.01)
    yield


def doubled(job: int) -> int:
    return 2 * job


def failing(job: int) -> int:
    if job == 3:
        raise WorkError("the third")
    return job


def last(flying: list[Future]) -> int:
    return len(flying) - 1


@pytest.mark.parametrize("threads", [1, 2, 5])
@pytest.mark.parametrize("turn", [lambda _: 0, last, lambda flying: 7 * len(flying) + 3])
def test_results_come_in_order_and_a_bounded_number_is_in_flight(threads: int, turn):
    workers = Workers(threads, turn)
    engine = dask_engine.DaskEngine(workers, workers.submit)
    assert list(engine.ordered_results(doubled, iter(range(60)))) == [(i, 2 * i) for i in range(60)]
    assert workers.given == 60 and workers.most <= 2 * threads
    assert list(engine.ordered_results(doubled, [])) == []


def test_a_job_whose_workers_die_is_given_out_again_three_times_over():
    workers = Workers(2)
    workers.deaths = {4: 2, 9: 1}
    engine = dask_engine.DaskEngine(workers, workers.submit)
    assert [r for _, r in engine.ordered_results(doubled, range(12))] == [2 * i for i in range(12)]
    assert workers.given == 15
    workers.deaths = {4: 3}
    with pytest.raises(WorkError, match="died each time"):
        list(engine.ordered_results(doubled, range(12)))
    assert workers.cancelled


def test_an_error_in_the_work_comes_back_as_it_is_and_the_rest_is_called_off():
    workers = Workers(2, last)
    engine = dask_engine.DaskEngine(workers, workers.submit)
    with pytest.raises(WorkError, match="the third"):
        list(engine.ordered_results(failing, range(50)))
    assert workers.given < 50 and workers.cancelled


def test_a_run_waits_for_workers_and_gives_up_in_words():
    workers = Workers(0)
    engine = dask_engine.DaskEngine(workers, workers.submit, patience=0.05)
    with pytest.raises(WorkError, match="No worker is connected"):
        list(engine.ordered_results(doubled, range(3)))
    workers.status = "closed"
    with pytest.raises(WorkError, match="scheduler does not answer"):
        list(engine.ordered_results(doubled, range(3)))

    class Lost(Workers):
        def land(self) -> None:
            self.flying.pop(0).end(CancelledError())

    workers = Lost(1)
    with pytest.raises(WorkError, match="scheduler does not answer"):
        list(dask_engine.DaskEngine(workers, workers.submit).ordered_results(doubled, range(3)))


class Told:
    """A client whose scheduler and workers answer what they are given to answer."""

    def __init__(self, scheduler: Any = None, **worker: Any) -> None:
        self.scheduler, self.worker = scheduler or dask_worker.installed(), worker

    def run_on_scheduler(self, function: Callable[[], Any]) -> Any:
        if isinstance(self.scheduler, Exception):
            raise self.scheduler
        return self.scheduler

    def run(self, function: Callable[..., Any], place: str, mark: str, server: str | None, on_error: str) -> Any:
        if "error" in self.worker:
            return {"tcp://a": self.worker["error"]}
        return {"tcp://a": function(self.worker.get("place", place), mark, server) | self.worker.get("but", {})}


def test_who_cannot_take_part_is_named_before_the_run(tmp_path: Path):
    here = dask_worker.installed()
    other = here | {"numpy": "1.0", "sources": "0000"}
    (tmp_path / "elsewhere").mkdir()
    dask_engine._examine(Told(), str(tmp_path), None)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["elsewhere"]
    for client, said in (
        (Told(scheduler=other), r"scheduler has other versions: sources 0000 there .*numpy 1\.0 there"),
        (Told(scheduler=ModuleNotFoundError("lattice_census")), "scheduler cannot load lattice-census"),
        (Told(error=ModuleNotFoundError("lattice_census")), "worker tcp://a cannot load lattice-census"),
        (Told(but={"installed": other}), r"worker tcp://a on .* has other versions"),
        (Told(place=str(tmp_path / "elsewhere")), "tcp://a .* cannot use the place for parts"),
        (Told(but={"answer": "never-written"}), "what it writes does not arrive here"),
    ):
        with pytest.raises(UsageError, match=said):
            dask_engine._examine(client, str(tmp_path), None)
    with pytest.raises(UsageError, match=r"tcp://a .* does not reach the Prefect server at http://127\.0\.0\.1:9"):
        dask_engine._examine(Told(), str(tmp_path), "http://127.0.0.1:9/api")


def test_a_worker_that_came_late_refuses_a_job_of_another_version():
    packed = pickle.dumps((doubled, 4))
    assert dask_worker.do_job(dask_worker.installed(), packed) == 8
    with pytest.raises(WorkError, match=r"other versions: moyopy .* there and 0\.0 here"):
        dask_worker.do_job(dask_worker.installed() | {"moyopy": "0.0"}, packed)


seen: list[int] = []


def there_at_the_third_look(job: int) -> int:
    seen.append(job)
    if len(seen) < 3:
        raise FileNotFoundError("not yet")
    return job


def test_a_file_that_another_machine_has_just_written_is_waited_for(monkeypatch):
    monkeypatch.setattr(time, "sleep", lambda _: None)
    seen.clear()
    assert dask_worker.do_job(dask_worker.installed(), pickle.dumps((there_at_the_third_look, 5))) == 5


def test_what_is_missing_is_said(tmp_path: Path, monkeypatch):
    table = write_csv(tmp_path / "t.csv", rows_of(crystals(3)))
    with pytest.raises(UsageError, match="scheduler is used with engine = dask alone"):
        run_night(table, tmp_path / "census.duckdb", scheduler="tcp://127.0.0.1:1")
    monkeypatch.setattr(dask_engine, "CONNECT_SECONDS", 0.5)
    with pytest.raises(WorkError, match=r"No Dask scheduler with a worker answers at tcp://127\.0\.0\.1:9"):
        run_night(table, tmp_path / "census.duckdb", engine="dask", scheduler="tcp://127.0.0.1:9")
    monkeypatch.setitem(sys.modules, "prefect_dask", None)
    with pytest.raises(UsageError, match=r"pip install 'lattice-census\[dask\]'"):
        run_night(table, tmp_path / "census.duckdb", engine="dask")
    run_night(table, tmp_path / "census.duckdb")
    assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM records") == [(3,)]
