"""Parts: results on their way as Parquet, in a folder or an object store, each file written once, whole or not at all.

A part is known by its place and name alone, so that these travel between processes and machines instead of what they
stand for. Names are digests of what a part was made from: a part that is there is the one that is wanted.
"""

from __future__ import annotations

import hashlib
import io
import os
import uuid
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import unquote, urlsplit

import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq

from .. import __version__
from ..errors import UsageError, WorkError

SHOW_HALF_WRITTEN = frozenset({"ftp", "sftp", "ssh", "smb", "hdfs", "arrow_hdfs", "webhdfs"})
"""Kinds of URL whose files are seen while they are written: these are renamed into place, as in a folder. An object
store shows an object when all of it has arrived."""


@dataclass(frozen=True, slots=True)
class PartFile:
    """What was written: enough to tell whether it is still that."""

    name: str
    rows: int
    bytes: int
    sha256: str


@dataclass(frozen=True, slots=True)
class Part:
    """One file, or the stem of several, by place and name."""

    place: str
    """An absolute folder, or a URL that fsspec understands."""

    name: str

    def __str__(self) -> str:
        return f"{self.place.rstrip('/')}/{self.name}"

    @property
    def is_remote(self) -> bool:
        """True where the place is a URL and no folder of this machine."""
        return is_url(self.place)

    @property
    def path(self) -> Path:
        """The file in a folder. Raises ValueError for a URL."""
        if self.is_remote:
            raise ValueError(f"{self} is not a file of this machine")
        return Path(self.place) / self.name

    def with_name(self, name: str) -> Part:
        """Another file in the same place."""
        return Part(self.place, name)

    def exists(self) -> bool:
        """Whether it is there."""
        if not self.is_remote:
            return self.path.exists()
        system, root = _open_place(self.place)
        system.invalidate_cache()
        return bool(system.exists(f"{root}/{self.name}"))

    def unlink(self) -> None:
        """Remove it; nothing happens where it is not there."""
        with suppress(FileNotFoundError):
            if self.is_remote:
                system, root = _open_place(self.place)
                system.rm_file(f"{root}/{self.name}")
            else:
                self.path.unlink()

    def data(self) -> bytes:
        """All its bytes. Raises FileNotFoundError."""
        if not self.is_remote:
            return self.path.read_bytes()
        system, root = _open_place(self.place)
        return bytes(system.cat_file(f"{root}/{self.name}"))

    def put(self, data: bytes | memoryview, durable: bool = True) -> None:
        """Write all bytes, or nothing that anybody sees under this name.

        durable: also where the power fails. What is written anew in any case when a run is taken up need not wait for
        the disk.
        """
        # Two machines, or a worker that was thought dead and its successor, may write one part at the same time.
        temporary = f"{self.name}.{uuid.uuid4().hex[:12]}.new"
        if not self.is_remote:
            begun = self.path.with_name(temporary)
            try:
                with begun.open("wb") as f:
                    f.write(data)
                    if durable:
                        f.flush()
                        os.fsync(f.fileno())
                begun.replace(self.path)
            except BaseException:
                begun.unlink(missing_ok=True)
                raise
            return
        system, root = _open_place(self.place)
        if urlsplit(self.place).scheme not in SHOW_HALF_WRITTEN:
            system.pipe_file(f"{root}/{self.name}", bytes(data))
            return
        system.pipe_file(f"{root}/{temporary}", bytes(data))
        system.mv(f"{root}/{temporary}", f"{root}/{self.name}")

    def write(self, table: pa.Table) -> PartFile:
        """Write a table as Parquet; a part is read once and as a whole, which neither dictionaries nor bounds help."""
        sink = pa.BufferOutputStream()
        pq.write_table(table, sink, compression="lz4", use_dictionary=False, write_statistics=False)
        data = memoryview(sink.getvalue())
        self.put(data)
        return PartFile(self.name, table.num_rows, len(data), hashlib.sha256(data).hexdigest())

    def write_frame(self, frame: pl.DataFrame) -> None:
        """Write rows down for a worker, as Parquet; who gives out the job again writes them again."""
        self.put(_parquet(frame), durable=False)

    def frame(self) -> pl.DataFrame:
        """Read it. Raises FileNotFoundError."""
        return pl.read_parquet(io.BytesIO(self.data()) if self.is_remote else self.path)


def raw_and_part(place: str, kind: str, frame: pl.DataFrame, *decisive: object) -> tuple[Part, Part]:
    """Rows written down for a worker, and the stem of what it will make of them.

    Both are named by the digest of the kind of work, the rows, all else that decides the result, and the version.
    """
    data = _parquet(frame)
    named = hashlib.sha256(f"{__version__}\0{kind}\0{hashlib.sha256(data).hexdigest()}\0{decisive!r}".encode())
    part = Part(place, f"{kind}-{named.hexdigest()[:32]}")
    raw = part.with_name(part.name + ".raw.parquet")
    raw.put(data, durable=False)
    return raw, part


def _parquet(frame: pl.DataFrame) -> memoryview:
    sink = io.BytesIO()
    frame.write_parquet(sink, compression="lz4", statistics=False)
    return sink.getbuffer()


def files_there(parts: Sequence[Part]) -> tuple[PartFile, ...] | None:
    """What stands in all of these files, or None where one is missing or is not Parquet from end to end."""
    found = []
    for part in parts:
        try:
            data = part.data()
            rows = pq.ParquetFile(pa.BufferReader(data)).metadata.num_rows
        except (FileNotFoundError, pa.ArrowInvalid):
            return None
        found.append(PartFile(part.name, rows, len(data), hashlib.sha256(data).hexdigest()))
    return tuple(found)


def is_url(place: str) -> bool:
    """Whether a place is a URL; anything else is a folder."""
    return "://" in place


def place_named(text: str) -> str:
    """What a person gives for a place as the text that travels: an absolute folder, or a URL without its last slash.

    `file://` is a folder. Raises UsageError for a URL that cannot be opened or that carries a password, which would be
    kept with the run.
    """
    if not is_url(text):
        return str(Path(text).expanduser().absolute())
    parts = urlsplit(text)
    if parts.scheme in ("file", "local"):
        return str(Path(unquote(parts.path)).absolute())
    if parts.password:
        raise UsageError(
            f"The URL for parts at {parts.hostname} carries a password, which would be kept with the run: give it in "
            "the environment or in the configuration of fsspec."
        )
    _open_place(text)
    return text.rstrip("/")


def make_place(place: str) -> None:
    """Make the folder where there is none yet; an object store knows no folders."""
    if is_url(place):
        system, root = _open_place(place)
        system.makedirs(root, exist_ok=True)
        return
    try:
        Path(place).mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise WorkError(f"The folder for parts {place} cannot be made: {error.strerror}.") from error


def empty_place(place: str) -> None:
    """Remove a place with all that is in it."""
    if not is_url(place):
        import shutil

        shutil.rmtree(place, ignore_errors=True)
        return
    system, root = _open_place(place)
    system.invalidate_cache()
    if system.exists(root):
        system.rm(root, recursive=True)


def _open_place(place: str) -> tuple[Any, str]:
    """The file system of a URL and the path in it; fsspec keeps one connection a process."""
    try:
        import fsspec
    except ImportError as error:
        raise UsageError(
            f"Parts at {place} need fsspec: pip install 'lattice-census[dask]', or name a folder."
        ) from error
    try:
        system, root = fsspec.core.url_to_fs(place)
    except (ImportError, ValueError) as error:
        raise UsageError(f"Parts cannot be kept at {place}: {error}") from error
    return system, str(root).rstrip("/")
