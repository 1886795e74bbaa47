"""Pointwise distance distributions and their column means.

Row i of the distribution of a crystal holds the distances from site i to its k nearest neighbours in ascending order
(Widdowson & Kurlin, NeurIPS 2022; SIAM J. Appl. Math. 2026); the column means over sites are kept apart for each
species of the centre. Taken on the exact primitive crystal, all of it is independent of cell, origin, orientation,
handedness and the order of sites, and continuous.

What is stored and why. The bound of grouping/candidates.py holds for each pair of paired sites, whose species are
equal, so it holds for the means over the sites of one species: one mean row a species of the centre is kept, in
float32. Distances to the neighbours of one species at a time need a row a site to be of use and are computed again
from the crystal where candidates are left.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..kernels.distances import neighbour_distances, species_means
from ..model.batch import CrystalBatch

Singles = NDArray[np.float32]

NEIGHBOURS = 64
"""k: more columns separate no further pairs on collections of real crystals, fewer begin to lose some."""


@dataclass(frozen=True, slots=True)
class Distributions:
    """Distances of every site of a batch, in the site order of the batch."""

    total: NDArray[np.float64]
    """(m, k) float64, angstrom, ascending: the k nearest neighbours of all species."""

    grouped: NDArray[np.float64]
    """(m, k) float64, angstrom: the same distances, ordered by the neighbour's species, ascending within each."""

    counts: NDArray[np.int64]
    """(m, kinds) int64: how many of the k are of each species (rank of the species within its crystal)."""

    ranks: NDArray[np.int64]
    """(m,) int64: rank of each site's own species among those of its crystal."""


@dataclass(frozen=True, slots=True)
class Fingerprint:
    """Column means of a batch, as stored."""

    means: Singles
    """(r, k) float32, angstrom: one row for each crystal and species of the centre, species in ascending code."""

    offsets: NDArray[np.int64]
    """(n + 1,) int64: the rows of each crystal."""


def species_ranks(batch: CrystalBatch) -> NDArray[np.int64]:
    """(m,) int64: for each site the rank of its species among those of its own crystal, in ascending code."""
    owner = np.repeat(np.arange(len(batch)), np.diff(batch.offsets))
    width = max(len(batch.tokens), 1)
    present, where = np.unique(owner * width + batch.species, return_inverse=True)
    first = np.searchsorted(present, np.arange(len(batch)) * width)
    return np.asarray(where - first[owner], dtype=np.int64)


def distributions(batch: CrystalBatch, k: int = NEIGHBOURS) -> Distributions:
    """Distances to the k nearest neighbours of every site. The crystals should be primitive: a cell that is not costs
    more and gives the same rows, repeated."""
    ranks = species_ranks(batch)
    kinds = int(ranks.max()) + 1 if len(ranks) else 1
    total, grouped, counts = neighbour_distances(
        batch.cells, batch.offsets, batch.positions, ranks, batch.periodicity == 2, kinds, k
    )
    return Distributions(total, grouped, counts, ranks)


def column_means(batch: CrystalBatch, rows: Distributions) -> Fingerprint:
    """Means of `rows.total` over the sites of each species of each crystal; the order of sites moves no bit of them."""
    kinds = np.zeros(len(batch), np.int64)
    np.maximum.at(kinds, np.repeat(np.arange(len(batch)), np.diff(batch.offsets)), rows.ranks + 1)
    offsets = np.concatenate([[0], np.cumsum(kinds)]).astype(np.int64)
    return Fingerprint(species_means(rows.total, batch.offsets, rows.ranks, offsets), offsets)


def fingerprint(batch: CrystalBatch, k: int = NEIGHBOURS) -> Fingerprint:
    """Column means of the pointwise distance distributions of exact primitive crystals."""
    return column_means(batch, distributions(batch, k))
