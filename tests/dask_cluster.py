"""A Dask scheduler and workers on the loopback of this machine, each a process, as one starts them by hand."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from types import TracebackType


class Cluster:
    """Use as a context: the scheduler is there until it is left, and what workers are still alive then are ended."""

    def __init__(self, folder: Path) -> None:
        """folder: for the scheduler's file and the logs."""
        self._folder = folder
        self.workers: list[subprocess.Popen[bytes]] = []
        self.address = ""

    def __enter__(self) -> Cluster:
        told = self._folder / "scheduler.json"
        self._scheduler = self._start("scheduler", "--port", "0", "--scheduler-file", str(told), "--no-show")
        until = time.monotonic() + 60
        while not self.address:
            assert time.monotonic() < until and self._scheduler.poll() is None, "the scheduler did not start"
            time.sleep(0.1)
            try:
                self.address = json.loads(told.read_text())["address"]
            except (OSError, ValueError):
                continue
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        for process in [*self.workers, self._scheduler]:
            if process.poll() is None:
                process.send_signal(signal.SIGKILL)
            process.wait()

    def add_worker(self) -> None:
        """One more worker, of one thread, that nothing starts again."""
        words = (self.address, "--nthreads", "1", "--no-nanny", "--death-timeout", "120")
        self.workers.append(self._start("worker", *words))

    def kill_worker(self) -> None:
        """SIGKILL the oldest worker that is alive."""
        victim = next(w for w in self.workers if w.poll() is None)
        victim.send_signal(signal.SIGKILL)
        victim.wait()

    def _start(self, kind: str, *words: str) -> subprocess.Popen[bytes]:
        with (self._folder / f"{kind}-{len(self.workers)}.log").open("wb") as log:
            return subprocess.Popen(
                [sys.executable, "-m", "distributed.cli.dask_" + kind, "--host", "127.0.0.1", "--no-dashboard", *words],
                stdout=log,
                stderr=log,
                cwd=self._folder,
                env={**os.environ, "PREFECT_HOME": str(self._folder / "prefect")},
            )
