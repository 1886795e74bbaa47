"""The files of a folder in a fixed order."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path


def walk(path: Path) -> Iterator[tuple[str, Path]]:
    """(name relative to the path, file) of every file under a folder; of a file, its own name and itself.

    Folders are walked in the order of their entries' names, whatever order the file system has. Hidden files and
    folders (a leading dot) are passed over, and so is anything that is neither a file nor a folder. Links are followed,
    a folder that contains itself only once. A folder that cannot be listed is handed out as if it were a file, so that
    opening it is refused by name.
    """
    if not path.is_dir():
        yield path.name, path
        return
    yield from _walk(path, "", frozenset())


def _walk(folder: Path, prefix: str, above: frozenset[tuple[int, int]]) -> Iterator[tuple[str, Path]]:
    try:
        status = folder.stat()
        names = sorted(entry.name for entry in folder.iterdir())
    except OSError:
        yield prefix.rstrip("/") or folder.name, folder
        return
    here = (status.st_dev, status.st_ino)
    if here in above:
        return
    for name in names:
        if name.startswith("."):
            continue
        path = folder / name
        if path.is_dir():
            yield from _walk(path, f"{prefix}{name}/", above | {here})
        elif path.is_file():
            yield prefix + name, path
