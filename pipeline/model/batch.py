"""A batch of crystals as columns: a few NumPy arrays, never a list of objects."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Codes = NDArray[np.int32]


@dataclass(frozen=True, slots=True)
class CrystalBatch:
    """Crystals in compressed columns; crystal i owns the sites offsets[i] to offsets[i+1].

    The arrays are made read-only. `tokens` is sorted, so that the order of the codes is the order of the tokens and
    nothing that sorts by code depends on what else is in the batch.
    """

    cells: Floats
    """(n, 3, 3) float64, angstrom, Cartesian; rows are the lattice vectors a, b, c."""

    offsets: Ints
    """(n + 1,) int64: where the sites of each crystal begin."""

    positions: Floats
    """(m, 3) float64, fractional: Cartesian = position @ cell."""

    species: Codes
    """(m,) int32: index into `tokens`."""

    tokens: tuple[str, ...]
    """Species tokens in ascending order of text: element symbols, or elements with occupancies (model/species.py)."""

    periodicity: NDArray[np.uint8] = field(default_factory=lambda: np.zeros(0, np.uint8))
    """(n,) uint8: 3, or 2 for a layer, whose aperiodic direction is the third row of its cell. Default: all 3."""

    def __post_init__(self) -> None:
        n = len(self.offsets) - 1
        if len(self.periodicity) != n:
            object.__setattr__(self, "periodicity", np.full(n, 3, np.uint8))
        if list(self.tokens) != sorted(set(self.tokens)):
            raise ValueError("tokens must be sorted and distinct")
        if self.cells.shape != (n, 3, 3) or self.positions.shape != (len(self.species), 3):
            raise ValueError("shapes of a CrystalBatch do not agree")
        if self.offsets[0] != 0 or self.offsets[-1] != len(self.species):
            raise ValueError("offsets of a CrystalBatch do not cover its sites")
        for name in ("cells", "offsets", "positions", "species", "periodicity"):
            array = np.ascontiguousarray(getattr(self, name)).view()
            array.flags.writeable = False
            object.__setattr__(self, name, array)

    def __len__(self) -> int:
        return len(self.offsets) - 1

    @property
    def volumes(self) -> Floats:
        """(n,) float64, cubic angstrom, positive."""
        volumes: Floats = np.abs(np.linalg.det(self.cells))
        return volumes

    def sites(self, i: int) -> slice:
        """The slice of `positions` and `species` that belongs to crystal i."""
        return slice(int(self.offsets[i]), int(self.offsets[i + 1]))

    def tokens_of(self, i: int) -> list[str]:
        """The species tokens of crystal i in site order."""
        return [self.tokens[c] for c in self.species[self.sites(i)]]


def batch_from_lists(
    cells: Sequence[Floats], positions: Sequence[Floats], species: Sequence[Sequence[str]]
) -> CrystalBatch:
    """A batch from one (3, 3) cell, one (sites, 3) array and one list of tokens a crystal. For few crystals."""
    tokens = tuple(sorted({t for s in species for t in s}))
    code = {t: i for i, t in enumerate(tokens)}
    offsets = np.concatenate([[0], np.cumsum([len(s) for s in species])]).astype(np.int64)
    return CrystalBatch(
        cells=np.array(cells, dtype=np.float64).reshape(-1, 3, 3),
        offsets=offsets,
        positions=np.concatenate([np.asarray(p, np.float64).reshape(-1, 3) for p in positions] or [np.zeros((0, 3))]),
        species=np.array([code[t] for s in species for t in s], dtype=np.int32),
        tokens=tokens,
    )


def select(batch: CrystalBatch, rows: Ints) -> CrystalBatch:
    """The crystals `rows` ((k,) int64) of a batch, in that order; tokens are kept as they are."""
    counts = np.diff(batch.offsets)[rows]
    offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    index = np.repeat(batch.offsets[rows] - offsets[:-1], counts) + np.arange(offsets[-1])
    return CrystalBatch(
        batch.cells[rows], offsets, batch.positions[index], batch.species[index], batch.tokens, batch.periodicity[rows]
    )
