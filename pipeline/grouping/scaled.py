"""The two grades that compare crystals at another volume: `rescaled`, and `isotypic` with its renaming of species."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from ..lattice.layer import areas
from ..model.batch import CrystalBatch, Floats, Ints, select
from ..tolerances import Tolerances
from .candidates import Search
from .preparation import Prepared
from .verification import NO_MATCH, Verified, verify
from .window import Window


def lengths_per_site(batch: CrystalBatch) -> Floats:
    """(n,) angstrom: cubic root of the volume per site; of layers the square root of the area per site."""
    lengths = np.cbrt(batch.volumes / np.diff(batch.offsets))
    layers = batch.periodicity == 2
    lengths[layers] = np.sqrt(areas(batch.cells[layers]) / np.diff(batch.offsets)[layers])
    return np.asarray(lengths)


def unit_scales(batch: CrystalBatch) -> Floats:
    """(n,): the factor on lengths that brings each crystal to one cubic unit a site, each layer to one square unit."""
    return 1.0 / lengths_per_site(batch)


def pair_lengths(batch: CrystalBatch, pairs: Ints) -> Floats:
    """(p,) angstrom: cubic root of the geometric mean of the volumes per site of each pair; of layers likewise."""
    lengths = lengths_per_site(batch)
    return np.asarray(np.sqrt(lengths[pairs[:, 0]] * lengths[pairs[:, 1]]))


def verify_rescaled(
    search: Search, as_given: Prepared, given_window: Window, pairs: Ints, tolerances: Tolerances, mirror_images: str
) -> Verified:
    """Verify pairs for `rescaled`: grade 1 where they reach it, 3 elsewhere.

    search: at one cubic unit a site (rescaled_window); as_given and given_window: the same batch for `near`. A pair
    that is `near` keeps the measures it has there; any other has its shift in angstrom at the geometric mean of the
    volumes, where strain is shape strain, and its volume ratio is limited.
    """
    near = verify(as_given, pairs, given_window, mirror_images)
    found = verify(search.prepared, pairs, search.window, mirror_images)
    unit = pair_lengths(search.prepared.batch, found.pairs)
    within = found.volume_ratio <= tolerances.rescaled_volume_ratio
    limit = tolerances.near_shift + 5e-10
    scaled = replace(
        found,
        largest_shift=found.largest_shift * unit,
        rms_shift=found.rms_shift * unit,
        proper_shift=found.proper_shift * unit,
        grade=np.where(within & (found.grade <= 1) & (found.largest_shift * unit <= limit), 1, NO_MATCH),
        proper_grade=np.where(within & (found.proper_grade <= 1) & (found.proper_shift * unit <= limit), 1, NO_MATCH),
    )
    return _choose(near.grade <= 1, near, scaled)


def _choose(first: NDArray[np.bool_], a: Verified, b: Verified) -> Verified:
    """Row by row, `a` where `first` and `b` elsewhere."""
    columns = {}
    for name in Verified.__slots__:
        x, y = getattr(a, name), getattr(b, name)
        columns[name] = np.where(first.reshape((-1,) + (1,) * (x.ndim - 1)), x, y)
    return Verified(**columns)


def renamings(batch: CrystalBatch) -> tuple[CrystalBatch, Ints]:
    """Every crystal under every one-to-one renaming that could count: (batch, owner of each of its crystals).

    Species become A, B, ... by ascending number of sites; species of equal number are given in every order. The first
    version of each crystal comes before its others. Two crystals have equal numbers of sites for equal letters, so any
    renaming of the one to the other is: the first version of the one against some version of the other.
    """
    owners: list[int] = []
    species: list[NDArray[np.int32]] = []
    width = 0
    for i in range(len(batch)):
        own = batch.species[batch.sites(i)]
        codes, counts = np.unique(own, return_counts=True)
        width = max(width, len(codes))
        ties = [codes[counts == c].tolist() for c in np.unique(counts)]
        for orders in itertools.product(*(itertools.permutations(t) for t in ties)):
            letters = np.zeros(len(batch.tokens), np.int32)
            letters[list(itertools.chain(*orders))] = np.arange(len(codes))
            owners.append(i)
            species.append(letters[own])
    rows = np.array(owners, dtype=np.int64)
    chosen = select(batch, rows)
    names = tuple(f"{k:04d}" for k in range(width))
    letters_of_all = np.concatenate(species) if species else np.zeros(0, np.int32)
    return CrystalBatch(chosen.cells, chosen.offsets, chosen.positions, letters_of_all, names, chosen.periodicity), rows


def verify_renamed(search: Search, owner: Ints, pairs: Ints, mirror_images: str) -> tuple[Verified, Ints]:
    """Verify pairs of owners for `isotypic` over all renamings; the rows carry the owners.

    search: of the batch of `renamings`. Returns the matches, and for each the version of the second crystal it was
    found with. Of several renamings the one of the strictest grade counts, then smallest shift, then the first.
    """
    starts = np.searchsorted(owner, np.arange(int(owner.max()) + 2))
    versions = np.diff(starts)[pairs[:, 1]]
    pair = np.repeat(np.arange(len(pairs)), versions)
    nth = np.arange(len(pair)) - np.repeat(np.cumsum(versions) - versions, versions)
    second = starts[pairs[pair, 1]] + nth
    found = verify(search.prepared, np.stack([starts[pairs[pair, 0]], second], axis=1), search.window, mirror_images)
    shift = np.where(np.isnan(found.largest_shift), np.inf, np.round(found.largest_shift, 9))
    order = np.lexsort((nth, shift, found.grade, pair))
    best = order[np.searchsorted(pair[order], np.arange(len(pairs)))]
    return replace(found.take(best), pairs=pairs), second[best]
