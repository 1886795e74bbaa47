"""The published file: whole and consistent at every moment, replaced by rename."""

from __future__ import annotations

import os
import shutil
from pathlib import Path


def publish(work: Path, published: Path, copy: Path | None = None) -> None:
    """Put a closed, checkpointed work store in the place of the published file.

    copy: an equal file beside it that is whole on disk, if there is one; it is used up. Open readers keep the file they
    opened. A stray write-ahead log beside the published file belongs to the file that is replaced and would make the
    new one unreadable; it goes first.
    """
    temporary = copy or published.with_name(f".{published.name}.{os.getpid()}.new")
    try:
        if copy is None:
            with work.open("rb") as source, temporary.open("wb") as target:
                shutil.copyfileobj(source, target, 8 << 20)
                target.flush()
                os.fsync(target.fileno())
        published.with_name(published.name + ".wal").unlink(missing_ok=True)
        temporary.replace(published)
    finally:
        temporary.unlink(missing_ok=True)
    sync_folder(published.parent)


def sync_folder(folder: Path) -> None:
    """Make renames in a folder durable."""
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def mark_of(path: Path) -> str | None:
    """What tells one publication from another file put in its place, without opening it; None where there is none."""
    try:
        facts = path.stat()
    except FileNotFoundError:
        return None
    return f"{facts.st_ino}:{facts.st_size}:{facts.st_mtime_ns}"
