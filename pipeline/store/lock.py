"""One writer at a time: an operating-system lock on a file of the work folder, with the holder's name in it."""

from __future__ import annotations

import fcntl
import json
import os
import time
from pathlib import Path
from types import TracebackType

from ..errors import StoreError


class WriterLock:
    """Held from `with` to its end, or to the end of the process, however it ends."""

    def __init__(self, path: Path, command: str, wait_seconds: float = 0.0) -> None:
        self._path = path
        self._command = command
        self._wait = wait_seconds
        self._descriptor: int | None = None

    def __enter__(self) -> WriterLock:
        self._path.parent.mkdir(parents=True, exist_ok=True)
        descriptor = os.open(self._path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        deadline = time.monotonic() + self._wait
        while True:
            try:
                fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
                break
            except BlockingIOError:
                if time.monotonic() >= deadline:
                    holder = _holder(descriptor)
                    os.close(descriptor)
                    raise StoreError(
                        f"Another run is writing to this store ({holder}). Wait for it, or give --wait SECONDS."
                    ) from None
                time.sleep(min(0.2, max(0.01, deadline - time.monotonic())))
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, json.dumps({"pid": os.getpid(), "command": self._command}).encode(), 0)
        self._descriptor = descriptor
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if self._descriptor is not None:
            os.ftruncate(self._descriptor, 0)
            os.close(self._descriptor)
            self._descriptor = None


def _holder(descriptor: int) -> str:
    try:
        facts = json.loads(os.pread(descriptor, 4096, 0))
        return f"process {facts['pid']}: {facts['command']}"
    except (ValueError, KeyError, TypeError):
        return "a process that has not said its number yet"
