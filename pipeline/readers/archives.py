"""Files as they stand on disk: plain, compressed, or archives, opened as streams of members and of raw records.

Archives are streamed: nothing is unpacked to disk (but for a temporary file where a format must be read from its end),
and every limit is held by counting the bytes that really come out, not those that a header claims.
"""

from __future__ import annotations

import re
import stat
import tarfile
import zipfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import IO, BinaryIO, cast

from ..model.raw import FileRefused, RawRecord, Reader, SplitOptions
from ..model.refusals import Refusal
from . import reader_for
from .detect import COMPRESSIONS, base_name, stem_of
from .guarded import (
    FAULTS,
    ArchiveLimits,
    Guarded,
    Total,
    buffered,
    compressed_stream,
    ratio_check,
    unreadable,
    unsafe_archive,
)
from .streams import CHUNK, clean_text

_TAR = re.compile(r".*\.(?:tar|tgz|tbz2?|txz|tar\.(?:gz|bz2|xz))", re.IGNORECASE)
_ARCHIVE = re.compile(r".*\.(?:zip|7z|rar|tar|tgz|tbz2?|txz|tar\.(?:gz|bz2|xz|zst))", re.IGNORECASE)
_BLOCK = 512


@dataclass(frozen=True, slots=True)
class Member:
    """One file, or one member of an archive; read its stream before asking for the next."""

    file: str
    """The name of the file, and for a member of an archive its path inside: `archive.zip/inner/a.cif`."""

    stem: str
    reader: Reader | None = None
    """None where the format is not known (the member is ignored), or where it is refused."""

    stream: BinaryIO | None = None
    refusal: Refusal | None = None


@dataclass(frozen=True, slots=True)
class FoundRecord:
    """A raw record and where it was found."""

    file: str
    reader: str
    """The reader's name; empty where the file was refused before one was chosen."""

    record: RawRecord


def open_records(
    path: Path, file: str, options: SplitOptions, limits: ArchiveLimits | None = None, explicit: bool = False
) -> Iterator[FoundRecord]:
    """The raw records of a file, in order, whatever it is packed in.

    What cannot be read is one record more, with a refusal and the stem as its label: what was read before stays. A file
    of no known format has no records, unless it was named (`explicit`): then it is refused.
    """
    for member in open_members(path, file, limits, explicit):
        name = member.reader.name if member.reader is not None else ""
        refusal = member.refusal
        if member.reader is not None and member.stream is not None:
            try:
                for record in member.reader.split(member.stream, member.stem, options):
                    yield FoundRecord(member.file, name, record)
            except FileRefused as refused:
                refusal = refused.refusal
            except OSError as error:
                refusal = unreadable(error)
        if refusal is not None:
            yield FoundRecord(member.file, name, RawRecord(member.stem, None, {}, refusal))


def open_members(
    path: Path, file: str, limits: ArchiveLimits | None = None, explicit: bool = False
) -> Iterator[Member]:
    """The members of a file: one for a plain or compressed file, those of an archive in its order.

    A member without reader and refusal is of no known format (or hidden) and is ignored. A member that is not safe or
    not readable has a refusal; the others go on, as far as the archive can be followed.
    """
    limits = limits or ArchiveLimits()
    try:
        if zipfile_named(path.name):
            yield from _zip_members(path, file, limits)
        elif _TAR.fullmatch(path.name):
            with path.open("rb") as raw:
                yield from _tar_members(compressed_stream(raw, path.name, limits, tar=True), file, limits)
        else:
            with path.open("rb") as raw:
                packed = path.name.lower().endswith(COMPRESSIONS)
                stream = compressed_stream(raw, path.name, limits) if packed else raw
                yield _member(stream, file, path.name, by_content=explicit, explicit=explicit)
    except FileRefused as refused:
        yield Member(file, stem_of(path.name), refusal=refused.refusal)
    except FAULTS as error:
        yield Member(file, stem_of(path.name), refusal=unreadable(error))


def zipfile_named(name: str) -> bool:
    """Whether the name is that of a zip archive."""
    return name.lower().endswith(".zip")


def _member(stream: BinaryIO, file: str, name: str, by_content: bool = False, explicit: bool = False) -> Member:
    try:
        peek = getattr(stream, "peek", None)
        head: bytes = peek(CHUNK) if peek is not None else b""
    except FileRefused as refused:
        return Member(file, stem_of(name), refusal=refused.refusal)
    reader = reader_for(base_name(name), head, by_content)
    if reader is None and explicit:
        message = "neither the name nor the content shows a format that is known"
        return Member(file, stem_of(name), refusal=Refusal("file_unreadable", message, "read"))
    return Member(file, stem_of(name), reader, stream)


def _refused_name(name: str) -> str | None:
    """Why a member's path cannot be taken, or None."""
    if not name or "\0" in name or any(ord(c) < 32 for c in name):
        return "a path that is empty or has control characters"
    if name.startswith(("/", "\\")) or re.match(r"[A-Za-z]:", name):
        return "an absolute path"
    if ".." in re.split(r"[/\\]", name):
        return "a path that leads outside the archive"
    return None


def _inner(name: str) -> str:
    """A member's path without `.` parts."""
    return "/".join(p for p in re.split(r"[/\\]", name) if p not in ("", "."))


def _is_hidden(inner: str) -> bool:
    return any(part.startswith(".") or part == "__MACOSX" for part in inner.split("/"))


def _archive_member(
    name: str, file: str, unsafe: str | None, opened: Callable[[], BinaryIO], limits: ArchiveLimits
) -> Member:
    """The member of an archive by its own name; `opened` gives its guarded stream."""
    unsafe = _refused_name(name) or unsafe
    inner = clean_text(_inner(name))
    full, stem = f"{file}/{inner}", stem_of(inner)
    if unsafe is not None:
        return Member(full, stem, refusal=unsafe_archive(f"{clean_text(name)}: {unsafe}"))
    if _is_hidden(inner):
        return Member(full, stem)
    if _ARCHIVE.fullmatch(inner):
        return Member(full, stem, refusal=unsafe_archive("an archive inside an archive is not opened"))
    try:
        stream = opened()
        if inner.lower().endswith(COMPRESSIONS):
            stream = compressed_stream(stream, inner, limits)
        return _member(stream, full, inner)
    except FileRefused as refused:
        return Member(full, stem, refusal=refused.refusal)
    except (*FAULTS, NotImplementedError) as error:
        return Member(full, stem, refusal=unreadable(error))


def _check_total(number: int, total: Total, limits: ArchiveLimits) -> None:
    if number > limits.members:
        raise FileRefused(unsafe_archive(f"more than {limits.members} members"))
    if total.out > total.limit:
        raise FileRefused(unsafe_archive(f"more than {total.limit} bytes come out of the archive"))


def _zip_members(path: Path, file: str, limits: ArchiveLimits) -> Iterator[Member]:
    total = Total(limits.total_bytes)
    with zipfile.ZipFile(path) as archive:
        for number, info in enumerate(archive.infolist(), 1):
            _check_total(number, total, limits)
            if info.is_dir():
                continue
            mode = info.external_attr >> 16
            # orig_filename keeps what zipfile.ZipInfo cuts off or rewrites.
            unsafe = "a link" if stat.S_ISLNK(mode) else None

            def opened(info: zipfile.ZipInfo = info) -> BinaryIO:
                ratio = ratio_check(limits, lambda: info.compress_size)
                return buffered(Guarded(archive.open(info), limits.member_bytes, ratio, total))

            yield _archive_member(info.orig_filename, file, unsafe, opened, limits)


class _Recorder:
    """Hands a stream to tarfile block by block and remembers the last one, to tell an end mark from a broken header."""

    def __init__(self, stream: BinaryIO) -> None:
        self._stream = stream
        self.last = b""

    def read(self, size: int) -> bytes:
        self.last = self._stream.read(size)
        return self.last


class _TarContent:
    """The content of a tar member, read block by block: tarfile would drop all of a read in which the archive ends."""

    def __init__(self, content: IO[bytes]) -> None:
        self._raw = getattr(content, "raw", content)
        self._fault: BaseException | None = None

    def read(self, size: int) -> bytes:
        if self._fault is not None:
            raise self._fault
        pieces: list[bytes] = []
        left = size
        while left > 0:
            try:
                piece: bytes = self._raw.read(min(left, _BLOCK))
            except (FileRefused, *FAULTS) as fault:
                if not pieces:
                    raise
                self._fault = fault
                break
            if not piece:
                break
            pieces.append(piece)
            left -= len(piece)
        return b"".join(pieces)


def _tar_members(stream: BinaryIO, file: str, limits: ArchiveLimits) -> Iterator[Member]:
    blocks = _Recorder(stream)
    total = Total(limits.total_bytes)
    with tarfile.open(fileobj=blocks, mode="r|", bufsize=_BLOCK) as archive:  # type: ignore[call-overload]
        number = 0
        while (info := archive.next()) is not None:
            # tarfile would keep every header it has met.
            archive.members = []
            number += 1
            _check_total(number, total, limits)
            if info.isdir():
                continue
            unsafe = None if info.isreg() else "a link" if info.issym() or info.islnk() else "no regular file"

            def opened(info: tarfile.TarInfo = info) -> BinaryIO:
                content = archive.extractfile(info)
                assert content is not None
                return buffered(
                    Guarded(cast(IO[bytes], _TarContent(content)), limits.member_bytes, lambda out: None, total)
                )

            yield _archive_member(info.name, file, unsafe, opened, limits)
        if len(blocks.last) < _BLOCK or blocks.last.strip(b"\0"):
            raise FileRefused(Refusal("file_unreadable", f"the archive breaks off after {number} members", "read"))
