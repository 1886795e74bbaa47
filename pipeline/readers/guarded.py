"""Streams out of archives and compressed files, with limits that are held by counting what comes out."""

from __future__ import annotations

import bz2
import gzip
import io
import lzma
import sys
import tarfile
import zipfile
import zlib
from collections.abc import Callable
from dataclasses import dataclass
from typing import IO, BinaryIO, cast

from ..model.raw import FileRefused
from ..model.refusals import Refusal
from .streams import CHUNK

FAULTS = (
    OSError,
    EOFError,
    zlib.error,
    lzma.LZMAError,
    zipfile.BadZipFile,
    tarfile.TarError,
    ValueError,
    RuntimeError,
)
"""What the standard library raises for damaged, encrypted or truncated input."""


@dataclass(frozen=True, slots=True)
class ArchiveLimits:
    """What an archive or a compressed file may come to."""

    member_bytes: int = 8 << 30
    """Bytes of one member."""

    total_bytes: int = 64 << 30
    """Bytes of all members."""

    ratio: float = 500.0
    """Bytes that come out over bytes that go in, once `ratio_after` bytes are out."""

    ratio_after: int = 32 << 20

    members: int = 1_000_000


def unreadable(error: BaseException) -> Refusal:
    """The refusal of a file that the standard library cannot read."""
    shown = error.strerror if isinstance(error, OSError) and error.strerror else str(error) or type(error).__name__
    return Refusal("file_unreadable", shown, "read")


def unsafe_archive(message: str) -> Refusal:
    """The refusal of an archive or member that is not safe."""
    return Refusal("archive_unsafe", message, "read")


class Guarded(io.RawIOBase):
    """A stream that counts what comes out of it, holds limits, and turns every fault into FileRefused."""

    def __init__(self, source: IO[bytes], limit: int, ratio: Callable[[int], str | None], total: Total) -> None:
        self._read: Callable[[int], bytes] = getattr(source, "read1", source.read)
        self._limit = limit
        self._ratio = ratio
        self._total = total
        self._out = 0

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: bytearray | memoryview) -> int:  # type: ignore[override]
        try:
            data = self._read(len(buffer))
        except FileRefused:
            raise
        except FAULTS as error:
            raise FileRefused(unreadable(error)) from None
        self._out += len(data)
        self._total.out += len(data)
        if self._out > self._limit:
            raise FileRefused(unsafe_archive(f"more than {self._limit} bytes come out of it"))
        if self._total.out > self._total.limit:
            raise FileRefused(unsafe_archive(f"more than {self._total.limit} bytes come out of the archive"))
        excess = self._ratio(self._out)
        if excess is not None:
            raise FileRefused(unsafe_archive(excess))
        buffer[: len(data)] = data
        return len(data)


class Total:
    """Bytes that came out of all members of one archive."""

    def __init__(self, limit: int) -> None:
        self.limit = limit
        self.out = 0


def buffered(guarded: Guarded) -> BinaryIO:
    """A stream that can be peeked into."""
    return cast(BinaryIO, io.BufferedReader(guarded, CHUNK))


def ratio_check(limits: ArchiveLimits, went_in: Callable[[], int]) -> Callable[[int], str | None]:
    """What is wrong with so many bytes out of those that `went_in`, or None."""

    def check(out: int) -> str | None:
        if out > limits.ratio_after and out > limits.ratio * max(went_in(), 1):
            return f"{out} bytes come out of {went_in()}: more than {limits.ratio:g} to 1"
        return None

    return check


def compressed_stream(raw: BinaryIO, name: str, limits: ArchiveLimits, tar: bool = False) -> BinaryIO:
    """The decompressed content of an open file or member, guarded."""
    went_in = _Counted(raw)
    source = _decompressor(went_in, name)
    # What comes out of a plain tar is as long as the file; its members are counted one by one.
    limit = (sys.maxsize if name.lower().endswith(".tar") else limits.total_bytes) if tar else limits.member_bytes
    return buffered(Guarded(source, limit, ratio_check(limits, lambda: went_in.count), Total(limit)))


class _Counted(io.RawIOBase):
    """Counts what is taken from a compressed stream."""

    def __init__(self, source: BinaryIO) -> None:
        self._source = source
        self.count = 0

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: bytearray | memoryview) -> int:  # type: ignore[override]
        data = self._source.read(min(len(buffer), 1 << 14))
        self.count += len(data)
        buffer[: len(data)] = data
        return len(data)


def _decompressor(raw: io.RawIOBase, name: str) -> IO[bytes]:
    lower, source = name.lower(), cast(IO[bytes], raw)
    if lower.endswith((".gz", ".tgz")):
        return cast(IO[bytes], gzip.GzipFile(fileobj=source, mode="rb"))
    if lower.endswith((".bz2", ".tbz", ".tbz2")):
        return cast(IO[bytes], bz2.BZ2File(source))
    if lower.endswith((".xz", ".txz")):
        return cast(IO[bytes], lzma.LZMAFile(source))
    return source
