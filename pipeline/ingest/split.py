"""From files to chunks of raw records: streamed, numbered, labelled, in the order of the input."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator
from dataclasses import dataclass

import polars as pl

from ..errors import WorkError
from ..model.raw import SplitOptions
from ..readers.archives import open_records
from ..settings import Settings
from .scan import FileToRead, SourceToRead

RAW_SCHEMA = {
    "record_id": pl.String,
    "file": pl.String,
    "position": pl.Int64,
    "label": pl.String,
    "reader": pl.String,
    "text": pl.String,
    "properties": pl.String,
    "raw_hash": pl.String,
    "reason": pl.String,
    "message": pl.String,
}

FEW_RECORDS = 400
"""No chunk is made smaller than this for the sake of the workers."""

CHUNK_BYTES = 32_000_000
"""A chunk ends at this much text, however few its records."""


@dataclass(frozen=True, slots=True)
class RawChunk:
    """Raw records of one source that are worked on together."""

    number: int
    records: pl.DataFrame
    """RAW_SCHEMA; text is null and reason set where the record is refused already."""

    begins: tuple[str, ...]
    """Files on disk whose first record is in this chunk (or that have none)."""

    found: dict[str, int]
    """Raw records of this chunk by file on disk."""

    digest: str
    """SHA-256 over the raw hashes, labels and places: the same input gives the same digest."""


def record_id(source: str, file: str, label: str) -> str:
    """First 20 hex digits of the SHA-256 of the three joined by NUL."""
    return hashlib.sha256("\0".join((source, file, label)).encode("utf-8", "surrogatepass")).hexdigest()[:20]


def raw_chunks(source: SourceToRead, settings: Settings) -> Iterator[RawChunk]:
    """The chunks of all changed files of a source. Raises WorkError where a file changes while it is read."""
    options = SplitOptions(source.settings.id_column, source.settings.structure_column, settings.max_text_bytes)
    number, rows, size, begins = 0, list[tuple[object, ...]](), 0, list[str]()
    found: dict[str, int] = {}
    for file in source.files:
        if not file.changed:
            continue
        begins.append(file.file)
        found.setdefault(file.file, 0)
        for row in _file_rows(source, file, options):
            rows.append(row)
            found[file.file] += 1
            size += len(str(row[5] or "")) + len(str(row[6]))
            if len(rows) >= _most_records(number, settings) or size >= CHUNK_BYTES:
                yield _chunk(number, rows, begins, found)
                number, rows, size, begins, found = number + 1, [], 0, [], {file.file: 0}
        _still_the_same(file)
    if begins or rows:
        yield _chunk(number, rows, begins, found)


def _most_records(number: int, settings: Settings) -> int:
    """Records of a chunk: the first chunks are smaller, so that workers can begin."""
    return max(min(FEW_RECORDS, settings.chunk_records), settings.chunk_records >> max(0, 2 - number))


def _file_rows(source: SourceToRead, file: FileToRead, options: SplitOptions) -> Iterator[tuple[object, ...]]:
    used: dict[str, int] = {}
    inner, position = file.file, 0
    for member in open_records(file.path, file.file, options, explicit=source.kind == "file"):
        if member.file != inner:
            used, inner, position = {}, member.file, 0
        record = member.record
        label = _numbered(used, record.label)
        properties = _as_json(record.properties)
        raw = hashlib.sha256(f"{record.text or ''}\0{properties}\0{member.reader}".encode("utf-8", "surrogatepass"))
        yield (
            record_id(source.source, member.file, label),
            member.file,
            position,
            label,
            member.reader,
            record.text,
            properties,
            raw.hexdigest(),
            record.refusal.reason if record.refusal else None,
            record.refusal.message if record.refusal else None,
        )
        position += 1


def _numbered(used: dict[str, int], label: str) -> str:
    """The label, with #2, #3 ... where the file has used it before (also as an explicit label)."""
    times = used.get(label, 0) + 1
    candidate = label if times == 1 else f"{label}#{times}"
    while times > 1 and candidate in used:
        times += 1
        candidate = f"{label}#{times}"
    used[label] = times
    if candidate != label:
        used[candidate] = 1
    return candidate


def _still_the_same(file: FileToRead) -> None:
    try:
        size = file.path.stat().st_size
    except OSError:
        size = 0 if file.sha256.startswith("unreadable") else -1
    if size != file.size and not file.sha256.startswith("unreadable"):
        raise WorkError(f"{file.path} changed while it was read. Give the command again once the file is complete.")


_as_json = json.JSONEncoder(sort_keys=True, ensure_ascii=False, default=str).encode


def _chunk(number: int, rows: list[tuple[object, ...]], begins: list[str], found: dict[str, int]) -> RawChunk:
    columns = zip(*rows, strict=True) if rows else ((),) * len(RAW_SCHEMA)
    frame = pl.DataFrame(dict(zip(RAW_SCHEMA, columns, strict=True)), schema=RAW_SCHEMA)
    digest = hashlib.sha256(json.dumps(begins).encode())
    for name in ("record_id", "position", "raw_hash", "reason"):
        digest.update(repr(frame[name].to_list()).encode())
    return RawChunk(number, frame, tuple(begins), {f: n for f, n in found.items() if n}, digest.hexdigest())
