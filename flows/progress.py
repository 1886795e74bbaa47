"""Progress for the person who waits: a bar on a terminal, plain lines where the output is piped. Always on stderr."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import Any

from lattice_census.ingest.progress import Silent


class PlainProgress:
    """A line at the start of a stage, then one every ten seconds, then one at its end."""

    def __init__(self) -> None:
        self._stage: str | None = None
        self._total: int | None = None
        self._done = 0
        self._begun = self._told = time.monotonic()

    def start(self, stage: str, total: int | None) -> None:
        """A stage begins."""
        self._finish()
        self._stage, self._total, self._done = stage, total, 0
        self._begun = self._told = time.monotonic()
        self._say(f"{stage} ...")

    def advance(self, records: int) -> None:
        """So many more records are done."""
        self._done += records
        if time.monotonic() - self._told >= 10:
            self._told = time.monotonic()
            of = f" of {self._total:,}" if self._total else ""
            self._say(f"{self._stage}: {self._done:,}{of} records")

    def note(self, message: str) -> None:
        """A sentence."""
        self._say(message)

    def _finish(self) -> None:
        if self._stage is not None and self._done:
            self._say(f"{self._stage}: {self._done:,} records in {time.monotonic() - self._begun:.1f} s")
        self._stage = None

    def _say(self, line: str) -> None:
        print(line, file=sys.stderr, flush=True)

    def __enter__(self) -> PlainProgress:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if kind is None:
            self._finish()


class BarProgress:
    """One bar a stage."""

    def __init__(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, Progress, SpinnerColumn, TextColumn, TimeElapsedColumn

        self._bars = Progress(
            SpinnerColumn(),
            TextColumn("{task.description}"),
            BarColumn(),
            MofNCompleteColumn(),
            TextColumn("records"),
            TimeElapsedColumn(),
            console=Console(stderr=True),
        )
        self._task: Any = None

    def start(self, stage: str, total: int | None) -> None:
        """A stage begins."""
        self._end_task()
        self._task = self._bars.add_task(stage, total=total)

    def advance(self, records: int) -> None:
        """So many more records are done."""
        if self._task is not None:
            self._bars.advance(self._task, records)

    def note(self, message: str) -> None:
        """A sentence above the bars."""
        self._bars.console.print(message, highlight=False, markup=False)

    def _end_task(self) -> None:
        if self._task is not None:
            done = self._bars.tasks[self._task].completed
            self._bars.update(self._task, total=done, completed=done)
            self._bars.stop_task(self._task)

    def __enter__(self) -> BarProgress:
        self._bars.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if kind is None:
            self._end_task()
        self._bars.stop()


class QuietProgress(Silent):
    """Nothing at all."""

    def __enter__(self) -> QuietProgress:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        return None


def progress_for(quiet: bool) -> PlainProgress | BarProgress | QuietProgress:
    """What fits the stream that stderr is."""
    if quiet:
        return QuietProgress()
    return BarProgress() if sys.stderr.isatty() else PlainProgress()
