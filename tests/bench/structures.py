"""The structures that the parts of the benchmark run on: those of a file, or invented ones with a known answer."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np

from lattice_census.cell.canonical import CanonicalBatch, canonicalise
from lattice_census.model.batch import CrystalBatch, select
from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.model.species import formulas_of
from lattice_census.readers import reader_named
from lattice_census.readers.archives import open_records
from lattice_census.tolerances import Tolerances

from .collection import ONE_COMPOSITION, Kind, Records, records
from .figures import Options


def mixed(options: Options, default: int) -> CrystalBatch:
    """The structures of the file, at most as many as asked for; or invented ones of all compositions."""
    count = options.count(default)
    return of_file(options.file, count) if options.file else invented(Kind(), count).batch


def one_composition(options: Options, default: int) -> tuple[CrystalBatch, list[str], np.ndarray | None]:
    """Canonical crystals of one composition, their keys, and the crystal of each where it is known.

    Of a file it is the composition that most records have.
    """
    count = options.count(default)
    if options.file is None:
        made = invented(ONE_COMPOSITION, count)
        canonical = canonical_of(made.batch)
        return canonical.crystals, canonical.crystal_key, made.crystal[canonical.rows]
    canonical = canonical_of(of_file(options.file, 1_000_000))
    compositions = np.array([f.composition for f in formulas_of(canonical.crystals)])
    names, counts = np.unique(compositions, return_counts=True)
    rows = np.flatnonzero(compositions == names[counts.argmax()])[:count]
    return select(canonical.crystals, rows), [canonical.crystal_key[i] for i in rows], None


def of_file(file: Path, most: int) -> CrystalBatch:
    """The structures of a file, at most so many of its records."""
    texts: dict[str, list[str | None]] = {}
    taken = 0
    for found in open_records(file, file.name, SplitOptions(), explicit=True):
        if found.record.refusal is None:
            texts.setdefault(found.reader, []).append(found.record.text)
            taken += 1
        if taken == most:
            break
    ((reader, listed),) = texts.items()
    return reader_named(reader).parse(listed, ParseOptions()).batch


@cache
def invented(kind: Kind, count: int) -> Records:
    """The first records of a collection."""
    return records(kind, 0, count)


def canonical_of(batch: CrystalBatch) -> CanonicalBatch:
    """The canonical crystals at the default tolerances."""
    return canonicalise(batch, Tolerances())
