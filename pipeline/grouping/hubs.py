"""Hubs: the crystals that crowds are seen from (frames.py).

A hub is a record of the crowd where one will do: it is compared with many others in any case. No record will where all
are noisy supercells, since a hub must have no approximate translations: then one of them is averaged over its own. And
where there is so much noise that no record matches many others, the mean of those around one is nearer to all. Such a
crystal is no record and nothing is said of it: it is compared with the others only to see them from it.
"""

from __future__ import annotations

import numpy as np

from ..fingerprint.distributions import distributions
from ..kernels.rows_filter import rows_close
from ..model.batch import CrystalBatch, Ints, select
from .candidates import ROUNDING, Search, allowed_pairs, spread_first
from .frames import Frame, frame_of
from .pair_store import PairStore
from .preparation import Prepared, prepare
from .verification import NO_MATCH, Verified, verify
from .window import Window

FEWEST = 32
"""A hub with fewer members is not worth its frame."""

ENOUGH = 0.5
"""A hub whose members are a smaller share of the nodes around it is replaced by their mean."""

WIDER = 2.0
"""In a window so many times as wide the mean is taken: two copies are up to twice as far apart as each is from it."""

EXTRA = 4
"""Comparisons with hubs, for each node of the crowd, after which no further hub is looked for."""


def find_frames(search: Search, store: PairStore, crowded: Ints, rank: Ints) -> list[Frame]:
    """Frames for as many of the crowded nodes (ascending) as are worth it; each node is in one at most.

    search: not scaled, one row a node. Around the first node without a frame, the best-ranked is taken from the more
    central half, of those with no approximate translation where there are any.
    """
    order, points = spread_first(search.coordinates[crowded])
    nodes, coordinates = crowded[order], search.coordinates[crowded[order]]
    slack = search.slack + ROUNDING
    plain = np.diff(search.prepared.crystals.variants)[nodes] == 1
    free = np.ones(len(nodes), bool)
    frames: list[Frame] = []
    spent = 0
    for seed in np.argsort(nodes).tolist():
        if not free[seed]:
            continue
        near = rows_close(points, 0, len(points), seed, slack)
        near = near[free[near]]
        free[seed] = False
        fit = near[plain[near]] if plain[near].any() else near
        off = np.abs(coordinates[fit] - np.median(coordinates[near], axis=0)).sum(axis=1)
        central = fit[np.argsort(off, kind="stable")[: (len(fit) + 1) // 2]]
        chosen = int(central[np.argmin(rank[nodes[central]])])
        near = rows_close(points, 0, len(points), chosen, slack)
        near = near[(free[near] | (near == seed)) & (near != chosen)]
        spent += len(near)
        if len(near) < FEWEST or spent > EXTRA * len(nodes):
            continue
        node, others = int(nodes[chosen]), np.sort(nodes[near])
        frame = _seen_from_record(search, store, node, others) if plain[chosen] else None
        if frame is None or len(frame.members) < ENOUGH * len(near):
            made = mean_of(search, node, others) if plain[chosen] else averaged(search.prepared, node)
            spent += len(near) * (2 if plain[chosen] else 1)
            other = None if made is None else _seen_from_made(search, made, np.sort(np.append(others, node)))
            if other is not None and (frame is None or len(other.members) > len(frame.members)):
                frame = other
        if frame is not None and len(frame.members) >= FEWEST:
            frames.append(frame)
            free[np.isin(nodes, frame.members)] = False
    return frames


def _seen_from_record(search: Search, store: PairStore, hub: int, others: Ints) -> Frame | None:
    """The frame of a node: it is verified against `others` (ascending)."""
    pairs = np.sort(np.stack([np.full(len(others), hub), others], axis=1), axis=1)
    pairs = pairs[allowed_pairs(search.prepared, pairs)[0]]
    store.ensure(pairs)
    found = store.matches()
    if found is None:
        return None
    codes = pairs[:, 0] * store.nodes + pairs[:, 1]
    found = found.take(np.isin(found.pairs[:, 0] * store.nodes + found.pairs[:, 1], codes))
    return frame_of(search.prepared.crystals, hub, np.arange(store.nodes), found, search.window.shift).with_hub(hub)


def _seen_from_made(search: Search, hub: CrystalBatch, members: Ints) -> Frame | None:
    """The frame of a crystal that is no record (a batch of one) with the nodes `members` (ascending)."""
    last = len(members)
    prepared = _prepared(search, _joined(select(search.prepared.batch, members), hub), search.window)
    if prepared.crystals.variants[last + 1] - prepared.crystals.variants[last] > 1:
        return None
    found = _matches(prepared, np.arange(last), last, search.window)
    return frame_of(prepared.crystals, last, np.append(members, -1), found, search.window.shift)


def _prepared(search: Search, batch: CrystalBatch, window: Window) -> Prepared:
    return prepare(batch, window, None, distributions(batch, search.rows.total.shape[1]))


def _matches(prepared: Prepared, rows: Ints, hub: int, window: Window) -> Verified:
    """The matches of rows of a batch with another."""
    pairs = np.stack([rows, np.full(len(rows), hub)], axis=1)
    found = verify(prepared, pairs[allowed_pairs(prepared, pairs)[0]], window)
    return found.take(found.grade < NO_MATCH)


def mean_of(search: Search, node: int, others: Ints) -> CrystalBatch | None:
    """The mean of a node and of those others (ascending) that match it in a wider window: a batch of one.

    None where few do, or the mean metric is none.
    """
    window = Window((WIDER * search.window.shift,) * 3, (search.window.strain,) * 3)
    nodes = np.sort(np.append(others, node))
    prepared = _prepared(search, select(search.prepared.batch, nodes), window)
    row, c = int(np.searchsorted(nodes, node)), prepared.crystals
    found = _matches(prepared, np.flatnonzero(nodes != node), row, window)
    frame = frame_of(c, row, nodes, found, window.shift).with_hub(node)
    if len(frame.members) < FEWEST:
        return None
    part = slice(int(c.offsets[row]), int(c.offsets[row + 1]))
    moved = frame.moved.mean(axis=0) @ np.linalg.inv(c.cells[row])
    return CrystalBatch(
        np.linalg.cholesky(frame.metrics.mean(axis=0))[None],
        np.array([0, part.stop - part.start]),
        c.positions[part] + moved,
        prepared.batch.species[prepared.order[part]],
        prepared.batch.tokens,
        prepared.batch.periodicity[row : row + 1],
    )


def averaged(prepared: Prepared, row: int) -> CrystalBatch | None:
    """A crystal averaged over its largest group of approximate translations, in the lattice they span: a batch of one.

    Of groups of one order, the one that moves sites least. None where there is no group, or the images of some site
    are not told apart.
    """
    c = prepared.crystals
    variants = np.arange(c.variants[row] + 1, c.variants[row + 1])
    if not len(variants):
        return None
    chosen = int(variants[np.lexsort((c.moved[variants], -c.orders[variants]))[0]])
    basis, part = c.bases[chosen], slice(int(c.offsets[row]), int(c.offsets[row + 1]))
    place = c.positions[part] @ c.matrices[chosen]  # cell = matrix @ basis
    species = prepared.batch.species[prepared.order[part]]
    left = np.ones(len(place), bool)
    positions, kinds = [], []
    for site in range(len(place)):
        if not left[site]:
            continue
        off = place - place[site]
        off -= np.rint(off)
        images = left & (species == species[site]) & (np.linalg.norm(off @ basis, axis=1) <= c.moved[chosen] + 1e-6)
        if images.sum() != c.orders[chosen]:
            return None
        left &= ~images
        positions.append(place[site] + off[images].mean(axis=0))
        kinds.append(species[site])
    return CrystalBatch(
        basis[None],
        np.array([0, len(kinds)]),
        np.array(positions),
        np.array(kinds, np.int32),
        prepared.batch.tokens,
        prepared.batch.periodicity[row : row + 1],
    )


def _joined(first: CrystalBatch, second: CrystalBatch) -> CrystalBatch:
    """Two batches of the same tokens as one."""
    return CrystalBatch(
        np.concatenate([first.cells, second.cells]),
        np.concatenate([first.offsets, first.offsets[-1] + second.offsets[1:]]),
        np.concatenate([first.positions, second.positions]),
        np.concatenate([first.species, second.species]),
        first.tokens,
        np.concatenate([first.periodicity, second.periodicity]),
    )
