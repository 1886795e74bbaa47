"""The memory of a process with all that it started, sampled while it runs."""

from __future__ import annotations

import subprocess
import threading
from collections.abc import Callable
from pathlib import Path
from types import TracebackType

INTERVAL = 0.25
"""Seconds between samples."""

PROC = Path("/proc")


class MemoryOfTree:
    """Samples until the context ends; `peak_bytes` is the largest sum over the tree.

    Where the system tells it (Linux), pages that several processes share are counted once, in proportion (PSS);
    elsewhere resident sizes are added up, which counts them several times.
    """

    def __init__(self, root: int, interval: float = INTERVAL) -> None:
        """interval: seconds between samples."""
        self.root = root
        self._interval = interval
        self.peak_bytes = 0
        self.peak_processes = 0
        self.measure = "PSS" if (PROC / "self" / "smaps_rollup").exists() else "RSS"
        self._end = threading.Event()
        self._thread = threading.Thread(target=self._watch, daemon=True)

    def __enter__(self) -> MemoryOfTree:
        self._thread.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self._end.set()
        self._thread.join()

    def _watch(self) -> None:
        while True:
            sizes = self._sizes()
            self.peak_bytes = max(self.peak_bytes, sum(sizes))
            self.peak_processes = max(self.peak_processes, len(sizes))
            if self._end.wait(self._interval):
                return

    def _sizes(self) -> list[int]:
        if self.measure == "PSS":
            return [size for pid in tree(self.root, _children) if (size := _pss(pid))]
        told = subprocess.run(["ps", "-axo", "pid=,ppid=,rss="], capture_output=True, text=True, check=False).stdout
        rows = [tuple(map(int, line.split())) for line in told.splitlines()]
        resident = {pid: kib * 1024 for pid, _, kib in rows}
        children: dict[int, list[int]] = {}
        for pid, parent, _ in rows:
            children.setdefault(parent, []).append(pid)
        return [resident[pid] for pid in tree(self.root, lambda pid: children.get(pid, [])) if pid in resident]


def tree(root: int, children: Callable[[int], list[int]]) -> list[int]:
    """A process and all its descendants."""
    found = [root]
    for pid in found:  # the list grows while it is gone through
        found += children(pid)
    return found


def _children(pid: int) -> list[int]:
    """Processes that one has started and that have not ended."""
    found: list[int] = []
    try:
        for thread in (PROC / str(pid) / "task").iterdir():
            found += map(int, (thread / "children").read_text().split())
    except OSError:  # it has ended
        pass
    return found


def _pss(pid: int) -> int:
    try:
        for line in (PROC / str(pid) / "smaps_rollup").read_text().splitlines():
            if line.startswith("Pss:"):
                return int(line.split()[1]) * 1024
    except OSError:  # it has ended
        return 0
    return 0
