"""A night on a collection in a process of its own: seconds by stage, processor time, peak memory, size of the store."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from contextlib import nullcontext
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

from .collection import Kind, write_collection
from .process_tree import MemoryOfTree

ROOT = Path(__file__).parents[2]
START_UP = ("imports", "compile kernels", "start workers")
"""Stages that do not depend on what is read: loading libraries, and kernels from their cache; and making workers, where
a night is asked to have them ready (else they are made in the first stage that needs them)."""


@dataclass(frozen=True, slots=True)
class Night:
    """What one night took."""

    store: Path
    seconds: float
    processor_s: float
    """Of the process and its workers."""

    stages: dict[str, float]
    """Seconds by step; `the rest` is what stands between them."""

    processor_stages: dict[str, float]
    """Processor time of the process itself, without its workers, by step."""

    counts: dict[str, Any]
    peak_bytes: int
    peak_processes: int
    measure: str
    """How memory was added up: PSS or RSS."""

    store_bytes: int

    @property
    def work_s(self) -> float:
        """Seconds without start-up."""
        return self.seconds - self.start_up_s

    @property
    def start_up_s(self) -> float:
        """Seconds of START_UP."""
        return sum(self.stages.get(name, 0.0) for name in START_UP)

    @property
    def processor_work_s(self) -> float:
        """Processor time without that of START_UP in the process itself; workers load libraries in it."""
        return self.processor_s - sum(self.processor_stages.get(name, 0.0) for name in START_UP)


def run_night(
    path: Path, store: Path, workers: int, ready_workers: bool = False, environment: dict[str, str] | None = None,
    watch_memory: bool = True, **settings: Any,
) -> Night:  # fmt: skip
    """`run PATH` into a store, new or not. Raises AssertionError where the run fails.

    watch_memory: sample it meanwhile, which takes a few hundredths of a core and halts each process for a moment.
    """
    given = {"workers": workers, **settings}
    asked = {"path": str(path), "store": str(store), "settings": given, "ready_workers": ready_workers}
    command = [sys.executable, "-m", "tests.bench.night_child", json.dumps(asked)]
    process = subprocess.Popen(
        command, cwd=ROOT, env={**os.environ, **(environment or {})}, stdout=subprocess.PIPE, text=True
    )
    memory = MemoryOfTree(process.pid)
    with memory if watch_memory else nullcontext():
        told, _ = process.communicate()
    assert process.returncode == 0, f"the night on {path.name} ended with exit code {process.returncode}"
    found = json.loads(told)
    return Night(
        store, found["seconds"], found["processor_s"], found["stages"], found["processor_stages"], found["counts"],
        memory.peak_bytes, memory.peak_processes, memory.measure, store.stat().st_size,
    )  # fmt: skip


def collection(scratch: Path, kind: Kind, count: int, workers: int) -> Path:
    """The folder of an invented collection; made once in a scratch folder."""
    folder = scratch / f"collection-{abs(hash(kind)):x}-0-{count}"
    if not (folder / "whole").exists():
        write_collection(folder / "records", kind, 0, count, workers)
        (folder / "whole").touch()
    return folder / "records"


@cache
def nights(scratch: Path, kind: Kind, count: int, workers: int, repeat: int) -> tuple[Night, ...]:
    """Nights on an invented collection, each on a new store; the last one's store stays. Parts share them."""
    path = collection(scratch, kind, count, workers)
    store = scratch / f"night-{abs(hash(kind)):x}-{count}-{workers}.duckdb"
    return tuple(run_night(path, fresh(store), workers) for _ in range(repeat))


def fresh(store: Path) -> Path:
    """The path of a store, with what was there taken away."""
    store.unlink(missing_ok=True)
    shutil.rmtree(store.with_name(store.name + ".work"), ignore_errors=True)
    return store
