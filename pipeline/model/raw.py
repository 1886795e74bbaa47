"""What a reader hands on: first raw records (cheap, streamed), then parsed crystals (in the worker pool).

A reader splits a file into raw records without understanding them (`split`), and parses the text of raw records into
crystals (`parse`). Splitting runs once, in order, in the parent; parsing runs in the workers, on any chunk.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import BinaryIO, Protocol

import numpy as np
from numpy.typing import NDArray

from .batch import CrystalBatch
from .refusals import Refusal


@dataclass(frozen=True, slots=True)
class RawRecord:
    """One structure as it stands in a file, not yet understood."""

    label: str
    """By the rules of the format; repeats in a file are numbered later."""

    text: str | None
    """The structure's own text; None where the row has none (refused as text_missing in `parse`)."""

    properties: dict[str, object]
    """Every other column or key of the record: str, int, float, bool or None (nested values as JSON text)."""

    refusal: Refusal | None = None
    """Set where the record is refused before parsing (a broken archive member, a line that is no JSON)."""


@dataclass(frozen=True, slots=True)
class SplitOptions:
    """What the user may say about where things stand in a file."""

    id_column: str | None = None
    structure_column: str | None = None
    max_text_bytes: int = 20_000_000
    """A longer structure text is refused (text_too_long), without being held in memory as a whole."""


@dataclass(frozen=True, slots=True)
class ParseOptions:
    """Limits on what a structure may be."""

    max_sites: int = 1000


@dataclass(frozen=True, slots=True)
class Parsed:
    """The crystals of a chunk of raw records, and the refusals; every input row is in exactly one of the two."""

    batch: CrystalBatch
    rows: NDArray[np.int64]
    """(n,) index of the input row of each crystal of the batch, ascending."""

    refusals: tuple[tuple[int, Refusal], ...]
    """(input row, refusal), ascending by row."""

    properties: tuple[dict[str, object], ...]
    """(n,) properties found in the structure text itself while parsing (may be empty dicts)."""


class FileRefused(Exception):
    """Raised by `split` when the rest of the file cannot be read; what was yielded before stays valid."""

    def __init__(self, refusal: Refusal) -> None:
        super().__init__(refusal.message)
        self.refusal = refusal


class Reader(Protocol):
    """One file format."""

    name: str
    """Stable short name, stored with each file: cif, csv, parquet, jsonl, extxyz, optimade, poscar."""

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """Raw records of an open, already decompressed binary stream, in file order, without reading it all at once.

        `stem` is the file's name without folder and suffixes. Raises FileRefused.
        """
        ...

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of structure texts of this format; None is refused as text_missing. Never raises for a bad text."""
        ...
