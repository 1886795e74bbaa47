"""A copy of the published file, made while a run works, that is brought up to the work store at its end.

A run leaves most of a large store as it is. Copied beforehand, only the pieces that differ are left to be written when
everything waits for the publication.
"""

from __future__ import annotations

import os
import threading
from pathlib import Path
from types import TracebackType

PIECE = 8 << 20
"""Bytes handled at a time."""

BLOCK = 256 << 10
"""Bytes that are written where they differ: DuckDB changes a file by blocks of this size."""

LEAST = 64 << 20
"""A smaller file is copied in no time."""


class CopyAhead:
    """The copy that goes on in a thread. Use as a context; leaving it stops the thread and removes the copy."""

    def __init__(self, source: Path, target: Path) -> None:
        """source: a file that nobody writes to; target: a path that nobody else uses."""
        self._source, self._target = source, target
        self._stop = threading.Event()
        self._whole = False
        self._thread = threading.Thread(target=self._copy, daemon=True)

    def __enter__(self) -> CopyAhead:
        self._thread.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self._stop.set()
        self._thread.join()
        self._target.unlink(missing_ok=True)

    def _copy(self) -> None:
        try:
            self._whole = self._copied()
        except OSError:
            # It is met again, and said, when the store is published without a copy. Until then a disk that is full
            # has the room back, which the run may need.
            self._target.unlink(missing_ok=True)

    def _copied(self) -> bool:
        """Copy, and tell whether it was not stopped before the end."""
        with self._source.open("rb") as source, self._target.open("wb") as target:
            while not self._stop.is_set():
                piece = source.read(PIECE)
                if not piece:
                    target.flush()
                    os.fsync(target.fileno())
                    return True
                target.write(piece)
                # Piece by piece, so that nobody else's wait for the disk is one for the whole file.
                target.flush()
                os.fdatasync(target.fileno())
        return False

    def brought_up_to(self, work: Path) -> bool:
        """Wait for the copy and make it equal to a closed file, durably; False where there is no whole copy."""
        self._thread.join()
        if not self._whole:
            return False
        with work.open("rb") as source, self._target.open("r+b", buffering=0) as target:
            at = 0
            while new := source.read(PIECE):
                old = os.pread(target.fileno(), len(new), at)
                if new != old:
                    _write_differing(target.fileno(), at, new, old)
                at += len(new)
            target.truncate(at)
            os.fsync(target.fileno())
        return True


def _write_differing(file: int, at: int, new: bytes, old: bytes) -> None:
    """Write those blocks of `new`, which stands at a place of a file, that are not equal to `old` there."""
    for start in range(0, len(new), BLOCK):
        block = new[start : start + BLOCK]
        if block != old[start : start + BLOCK]:
            done = 0
            while done < len(block):
                done += os.pwrite(file, block[done:], at + start + done)
