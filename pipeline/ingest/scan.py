"""What is to be read: the files of each source with their hashes, against what the store knows."""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import duckdb

from ..errors import UsageError
from ..readers.walk import walk
from ..settings import Settings, SourceSettings


@dataclass(frozen=True, slots=True)
class FileToRead:
    """One file on disk."""

    file: str
    """Path relative to the PATH given."""

    path: Path
    sha256: str
    size: int
    changed: bool
    """The store does not hold just this content (or a recomputation is asked for)."""


@dataclass(frozen=True, slots=True)
class SourceToRead:
    """One source as it is on disk now."""

    source: str
    root: Path
    kind: str
    settings: SourceSettings
    files: tuple[FileToRead, ...]
    gone: tuple[str, ...]
    """Files that the store knows and the disk no longer has."""

    force: bool
    """Every record is worked on again, equal or not."""

    @property
    def stale(self) -> bool:
        """True where there is anything to do."""
        return bool(self.gone) or any(f.changed for f in self.files)


@dataclass(frozen=True, slots=True)
class Plan:
    """All sources of a run."""

    sources: tuple[SourceToRead, ...]
    arguments: dict[str, Any] = field(default_factory=dict)

    @property
    def hash(self) -> str:
        """Of arguments and inputs, not of the state of the store: what tells a run that is to be resumed."""
        inputs = [[s.source, s.settings.model_dump(), [[f.file, f.sha256] for f in s.files]] for s in self.sources]
        return hashlib.sha256(json.dumps([self.arguments, inputs], sort_keys=True).encode()).hexdigest()


@dataclass(frozen=True, slots=True)
class IngestRequest:
    """What the user asks `ingest` for."""

    paths: tuple[Path, ...]
    source: str | None = None
    source_settings: dict[str, Any] = field(default_factory=dict)
    """Those of SourceSettings that were given as options."""

    recompute: bool = False


def scan(
    connection: duckdb.DuckDBPyConnection, request: IngestRequest, settings: Settings, read_all: bool = False
) -> Plan:
    """Walk the paths, hash every file, and compare. Read-only. Raises UsageError naming the path or source.

    read_all: every known source is read again, from where it was last read.
    """
    if request.source is not None and len(request.paths) > 1:
        raise UsageError("--source names one source: give one PATH with it.")
    known = {
        name: (root, json.loads(stored))
        for name, root, stored in connection.execute("SELECT source, root, settings FROM sources").fetchall()
    }
    paths = [(p, request.source or _own_name(p)) for p in request.paths]
    if read_all:
        named = {name for _, name in paths}
        paths += [(Path(root), name) for name, (root, _) in sorted(known.items()) if name not in named]
    names = [name for _, name in paths]
    for name in names:
        if names.count(name) > 1:
            raise UsageError(f"Two paths would both be the source {name!r}: ingest them one by one with --source NAME.")
        if not name or "\0" in name or "\n" in name or ":" in name:
            raise UsageError(
                f"{name!r} cannot name a source (empty, a line break or a colon in it): give --source NAME."
            )
    sources = []
    for path, name in sorted(paths, key=lambda p: p[1]):
        if not path.exists():
            raise UsageError(f"There is no file or folder {path}" + (f" (source {name})." if read_all else "."))
        root = path.resolve()
        asked = request.source_settings if path in request.paths else {}
        before = known.get(name)
        if before and before[0] != str(root) and request.source is None:
            raise UsageError(
                f"The source {name!r} is known from {before[0]}, and {root} is another place. If it is the same "
                f"collection, moved, give --source {name}; if it is another one, give it another name with --source."
            )
        of_source = _source_settings(name, asked, settings, before[1] if before else None, request.recompute)
        sources.append(_scan_source(connection, name, root, of_source, request.recompute))
    arguments = {
        "paths": [str(s.root) for s in sources],
        "recompute": request.recompute,
        "settings": {stage: settings.of_stage(stage) for stage in ("parse", "canonical", "fingerprint")},
    }
    return Plan(tuple(sources), arguments)


def _own_name(path: Path) -> str:
    return path.name or path.resolve().name


def _source_settings(
    name: str, asked: dict[str, Any], settings: Settings, before: dict[str, Any] | None, recompute: bool
) -> SourceSettings:
    given = settings.sources.get(name, SourceSettings()).model_dump(exclude_none=True)
    given.update({k: v for k, v in asked.items() if v is not None})
    merged = SourceSettings.model_validate({**(before or {}), **given})
    if before is not None and not recompute:
        old = SourceSettings.model_validate(before)
        lines = [f"{k}: {getattr(old, k)} -> {v}" for k, v in merged.model_dump().items() if getattr(old, k) != v]
        if lines:
            raise UsageError(
                f"The records of source {name!r} were read with other settings ({', '.join(lines)}). They must be read "
                "again: give --recompute, or leave the setting as it is."
            )
    return merged


def _scan_source(
    connection: duckdb.DuckDBPyConnection, name: str, root: Path, of_source: SourceSettings, force: bool
) -> SourceToRead:
    known = {
        file: (sha, missing)
        for file, sha, missing in connection.execute(
            "SELECT file, sha256, missing_since_run FROM files WHERE source = ?", [name]
        ).fetchall()
    }
    files = []
    for relative, path in walk(root):
        sha, size = _hash_file(path)
        changed = force or known.get(relative) != (sha, None)
        files.append(FileToRead(relative, path, sha, size, changed))
    present = {f.file for f in files}
    gone = tuple(sorted(f for f, (_, missing) in known.items() if f not in present and missing is None))
    return SourceToRead(name, root, "folder" if root.is_dir() else "file", of_source, tuple(files), gone, force)


def _hash_file(path: Path) -> tuple[str, int]:
    """SHA-256 and size; an unreadable file has the hash of nothing and is refused by name when it is read."""
    try:
        with path.open("rb") as f:
            digest = hashlib.file_digest(f, "sha256")
            return digest.hexdigest(), f.tell()
    except OSError as error:
        return f"unreadable: {error.strerror}", 0
