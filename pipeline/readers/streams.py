"""Reading of binary streams by bounded pieces, and text that is safe to store."""

from __future__ import annotations

from collections.abc import Iterator
from typing import BinaryIO

CHUNK = 1 << 17
"""Bytes asked for at a time."""

_BOM = b"\xef\xbb\xbf"


def chunks_of(stream: BinaryIO) -> Iterator[bytes]:
    """A stream in pieces as they come, so that nothing read before a fault is lost.

    A UTF-8 byte-order mark at the start is dropped. Line ends of CR alone become LF (a file in which the first piece
    has CR and no LF).
    """
    read = getattr(stream, "read1", stream.read)
    chunk: bytes = read(CHUNK).removeprefix(_BOM)
    lone = b"\r" in chunk and b"\n" not in chunk
    while chunk:
        yield chunk.replace(b"\r", b"\n") if lone else chunk
        chunk = read(CHUNK)


def blocks_of(stream: BinaryIO, limit: int) -> Iterator[tuple[bytes, bool]]:
    """A stream in pieces of whole lines, each with True; the parts of a line longer than `limit` after its first have
    False: they do not begin a line."""
    held: list[bytes] = []
    size, begins = 0, True
    for chunk in chunks_of(stream):
        cut = chunk.rfind(b"\n") + 1
        if cut:
            held.append(chunk[:cut])
            yield b"".join(held), begins
            held, size, begins = [chunk[cut:]], len(chunk) - cut, True
        else:
            held.append(chunk)
            size += len(chunk)
            if size > limit:
                yield b"".join(held), begins
                held, size, begins = [], 0, False
    if size:
        yield b"".join(held), begins


def lines_of(stream: BinaryIO, limit: int) -> Iterator[bytes]:
    """The lines of a stream with their line ends; one longer than `limit` comes in pieces."""
    for block, _ in blocks_of(stream, limit):
        yield from block.splitlines(keepends=True) if b"\r" not in block else _lines(block)


def _lines(block: bytes) -> Iterator[bytes]:
    """Lines cut at LF alone (splitlines would also cut at a CR inside a line)."""
    start = 0
    while (end := block.find(b"\n", start) + 1) > 0:
        yield block[start:end]
        start = end
    if start < len(block):
        yield block[start:]


def decoded(raw: bytes) -> str:
    """UTF-8, or ISO 8859-1 where it is not: numbers and symbols are ASCII in both, only prose may differ."""
    try:
        return raw.decode()
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def clean_text(text: str) -> str:
    """A label or name that can be stored as UTF-8 and joined by NUL: control characters and lone surrogates replaced.

    The replacement is U+FFFD, the sign of the Unicode standard for that; line breaks and tabs become spaces.
    """
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() or c == "\u00a0" else " " if c in "\t\r\n" else "\ufffd" for c in text)
