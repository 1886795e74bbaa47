"""Archives and compressed files with the same bytes on every machine: stored, without times, names or owners.

What a compressor makes of its input differs between versions of the same library, so nothing is really compressed here.
"""

from __future__ import annotations

import io
import struct
import tarfile
import zipfile
import zlib
from collections.abc import Iterable

Files = Iterable[tuple[str, bytes]]


def stored_gzip(data: bytes) -> bytes:
    """A gzip member (RFC 1952) of stored blocks (RFC 1951, 3.2.4)."""
    out = [b"\x1f\x8b\x08\x00\x00\x00\x00\x00\x00\xff"]
    starts = range(0, max(len(data), 1), 65535)
    for start in starts:
        block = data[start : start + 65535]
        last = start == starts[-1]
        out.append(struct.pack("<BHH", last, len(block), len(block) ^ 0xFFFF) + block)
    out.append(struct.pack("<II", zlib.crc32(data), len(data) & 0xFFFFFFFF))
    return b"".join(out)


def stored_zip(files: Files) -> bytes:
    """A zip archive of stored members."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_STORED) as archive:
        for name, data in files:
            info = zipfile.ZipInfo(name, (1980, 1, 1, 0, 0, 0))
            info.create_system = 3
            info.external_attr = 0o644 << 16
            archive.writestr(info, data)
    return buffer.getvalue()


def stored_tar(files: Files) -> bytes:
    """A tar archive (POSIX.1-1988)."""
    buffer = io.BytesIO()
    with tarfile.open(fileobj=buffer, mode="w", format=tarfile.USTAR_FORMAT) as archive:
        for name, data in files:
            info = tarfile.TarInfo(name)
            info.size = len(data)
            archive.addfile(info, io.BytesIO(data))
    return buffer.getvalue()
