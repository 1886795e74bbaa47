"""The structures that the parts of the benchmark run on: those of a table, or invented ones with a known answer."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from lattice_census.cell.canonical import CanonicalBatch, canonicalise
from lattice_census.model.batch import CrystalBatch, batch_from_lists, select
from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.readers import reader_named
from lattice_census.readers.archives import open_records
from lattice_census.tolerances import Tolerances
from tests import strategies


def load(file: Path | None, most: int = 4000) -> CrystalBatch:
    """The structures of a file (at most `most`), or 1,000 invented ones of about 9 sites with disguised copies."""
    if file is None:
        return batch_from_lists(*map(list, zip(*invented(1000), strict=True)))  # type: ignore[arg-type]
    texts: dict[str, list[str | None]] = {}
    for found in open_records(file, file.name, SplitOptions(), explicit=True):
        if found.record.refusal is None and sum(map(len, texts.values())) < most:
            texts.setdefault(found.reader, []).append(found.record.text)
    ((reader, listed),) = texts.items()
    return reader_named(reader).parse(listed, ParseOptions()).batch


def invented(count: int, seed: int = 7) -> list[strategies.Crystal]:
    """Crystals of one composition, every third a noisy disguise of an earlier one."""
    rng = np.random.default_rng(seed)
    out: list[strategies.Crystal] = []
    for i in range(count):
        if i % 3 == 2:
            out.append(strategies.disguise(rng, out[int(rng.integers(len(out)))], 1, noise=0.01, strain=0.001))
        else:
            kind = strategies.LATTICE_TYPES[int(rng.integers(14))]
            out.append(strategies.random_crystal(rng, kind, int(rng.choice([6, 9, 12])), ("Al", "Al", "O")))
    return out


def canonical_of(batch: CrystalBatch) -> CanonicalBatch:
    """The canonical crystals at the default tolerances."""
    return canonicalise(batch, Tolerances())


def largest_composition(canonical: CanonicalBatch) -> tuple[CrystalBatch, list[str]]:
    """The crystals of the composition that most records have, and their keys."""
    from lattice_census.model.species import formulas_of

    compositions = np.array([f.composition for f in formulas_of(canonical.crystals)])
    names, counts = np.unique(compositions, return_counts=True)
    rows = np.flatnonzero(compositions == names[counts.argmax()])
    return select(canonical.crystals, rows), [canonical.crystal_key[i] for i in rows]
