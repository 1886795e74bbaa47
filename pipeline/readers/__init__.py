"""Readers of structure files: each splits a file into raw records and parses their texts into crystals.

Modules are imported when a format is first met, so that nothing is loaded that a command does not need.
"""

from __future__ import annotations

from functools import cache
from importlib import import_module

from ..model.raw import Reader

_READERS = {
    "cif": ("cif", "CifReader"),
    "csv": ("table_csv", "CsvReader"),
    "parquet": ("parquet", "ParquetReader"),
    "jsonl": ("jsonl", "JsonLinesReader"),
    "extxyz": ("extxyz", "ExtendedXyzReader"),
    "optimade": ("optimade", "OptimadeReader"),
    "poscar": ("poscar", "PoscarReader"),
}

READER_NAMES = tuple(_READERS)
"""The names of all readers, as stored with each file."""


@cache
def reader_named(name: str) -> Reader:
    """The reader of a stable name. Raises KeyError for another name."""
    module, attribute = _READERS[name]
    reader: Reader = getattr(import_module(f".{module}", __name__), attribute)()
    return reader


def reader_for(name: str, head: bytes, by_content: bool = True) -> Reader | None:
    """The reader of a file by its name, then by its first bytes (64 KiB are enough); None if no format is met."""
    from .detect import format_of_file

    found = format_of_file(name, head, by_content)
    return reader_named(found) if found is not None else None
