"""Group the records of a composition: candidates, verification, families and groups at each grade.

Records of one crystal_key are one node; the record with the smallest id stands for it, and a stored match between two
such records stands for all records of the two keys. Everything is sorted by id first: the result depends on the records
alone, not on their order, and not on how many runs it took. Many small compositions may be worked on in one call: what
each costs beside its pairs is paid once.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..errors import UsageError
from ..fingerprint.distributions import NEIGHBOURS
from ..kernels.rows_filter import close_counts, close_pairs
from ..model.batch import CrystalBatch, Floats, Ints, select
from ..tolerances import Tolerances
from .candidates import ROUNDING, Search, filtered, spread_first
from .crowds import Crowd
from .graph import components, spanning_forest
from .groups import stars
from .pair_store import Limit, PairStore
from .searches import Searcher, searcher
from .verification import Verified
from .witness import Witnesses

CROWDED = 200
"""A node with more candidates than this is crowded (crowds.py)."""

DENSE = 200
"""Pairs a node that the coordinates may leave before listing them costs too much."""

CROWD_NEIGHBOURS = 8
"""Nearest crowded nodes in the fingerprint that a crowded node is verified against in any case."""


@dataclass(frozen=True, slots=True)
class Options:
    """How a composition is grouped."""

    mirror_images: str = "merge"
    """`merge`: a crystal and its mirror image are one; `separate`: two."""

    search: str = "near"
    """`near` (grades same and near), `rescaled`, or `isotypic`."""

    neighbours: int = NEIGHBOURS
    """k of the distance distributions that the filters use: the groups do not depend on it, the work does."""

    matches_per_record: int = 32
    crowded: int = CROWDED
    together: tuple[tuple[str, str], ...] = ()
    """Pairs of record ids that belong together whatever was measured."""

    apart: tuple[tuple[str, str], ...] = ()
    """Pairs of record ids that do not match whatever was measured."""


@dataclass(frozen=True, slots=True)
class Members:
    """Families and groups of one grade, one row a record in ascending order of id."""

    family_id: NDArray[np.str_]
    group_id: NDArray[np.str_]
    kept: NDArray[np.bool_]

    witness_shift: Floats
    """(n,): largest shift of the match with the kept record: 0 for records of its key, NaN where pinned without a
    match."""

    witness_strain: Floats


@dataclass(frozen=True, slots=True)
class Grouping:
    """The result for one composition. Arrays over records are in ascending order of id."""

    ids: NDArray[np.str_]
    """(n,)"""

    node: Ints
    """(n,): the record (index into ids) that stands for each record's key in `matches`."""

    matches: Verified
    """Matches kept; `pairs` are indices into ids, first < second."""

    witnesses: Witnesses
    """Of `matches`, row by row."""

    more: NDArray[np.bool_]
    """(n,): the record has matches in the window that are not in `matches`, or may have (crowds)."""

    members: dict[str, Members]
    """By grade: `same` and `near`, or the grade searched for."""

    counts: dict[str, int]
    """Nodes, candidates, verified pairs, matches, crowded nodes."""

    candidates: Ints
    """(parts,): candidate pairs of each part."""

    verified: Ints
    """(parts,): pairs of each part that were compared site by site."""


def group_composition(
    batch: CrystalBatch,
    keys: Sequence[str],
    ids: Sequence[str],
    rank: Sequence[int] | Ints,
    tolerances: Tolerances,
    options: Options | None = None,
    parts: Ints | None = None,
) -> Grouping:
    """Matches, families and groups of the records of one composition (for `isotypic`: one species renamed to
    another's), or of several small ones.

    batch: n exact primitive crystals with the same species in the same proportions; keys: crystal_key of each; ids:
    distinct record ids; rank: smaller is kept first, ties by id. parts (n,): number from 0 of the composition of each
    record, where there are several; all have equally many species, and at most `crowded` records. Records of different
    parts are not compared. Deterministic under any order of the records, and whatever other parts there are.
    Raises UsageError for repeated or unknown ids.
    """
    chosen = options or Options()
    if parts is not None and (chosen.search != "near" or np.bincount(parts).max(initial=0) > chosen.crowded):
        raise UsageError("several compositions in one call must be small, and are searched for near matches alone")
    order = np.argsort(np.array(ids, dtype=str), kind="stable").astype(np.int64)
    names = np.array(ids, dtype=str)[order]
    if len(np.unique(names)) != len(names):
        raise UsageError("record ids of a composition must be distinct")
    ranks = np.lexsort((names, np.asarray(rank)[order]))
    place = np.empty(len(names), np.int64)
    place[ranks] = np.arange(len(names))
    together, apart = _pins(chosen.together, names), _pins(chosen.apart, names)
    pinned = np.unique(np.concatenate([together.ravel(), apart.ravel()]))
    single = np.zeros(len(names), bool)
    single[pinned] = True
    marks = [f"{k} {names[i]}" if single[i] else k for i, k in enumerate(np.array(keys, dtype=str)[order].tolist())]
    _, first, node_of = np.unique(marks, return_index=True, return_inverse=True)
    by_id = np.argsort(first)  # nodes in ascending order of the id that stands for them
    renumber = np.empty_like(by_id)
    renumber[by_id] = np.arange(len(by_id))
    stands, node_of = first[by_id], renumber[node_of]
    node_rank = np.full(len(stands), len(names), dtype=np.int64)
    np.minimum.at(node_rank, node_of, place)

    by = searcher(select(batch, order[stands]), tolerances, chosen.search, chosen.mirror_images, chosen.neighbours)
    store = PairStore(len(stands), by.verify, node_of[together], node_of[apart])
    part = None if parts is None else parts[order[stands]]
    if part is None:
        crowded, candidates = _verify_plain(by, store, chosen.crowded)
    else:
        crowded, candidates = np.zeros(0, np.int64), _verify_parts(by, store, part)
    members: dict[str, Members] = {}
    keep_pairs: list[Ints] = []
    for grade, limit in by.limits:
        kept = _families_and_groups(by.search, store, limit, crowded, node_rank)
        pairs, shift, strain, t = store.edges(limit)
        family = components(len(stands), pairs)
        keep_pairs.append(pairs[spanning_forest(len(stands), pairs, t)])
        away = np.flatnonzero(kept != np.arange(len(stands)))
        star = np.stack([np.minimum(away, kept[away]), np.maximum(away, kept[away])], axis=1)
        keep_pairs.append(star)
        members[grade] = _members(names, ranks, place, node_of, stands, family, kept, pairs, shift, strain)
    found = store.matches()
    if found is None:
        found = by.verify(np.zeros((0, 2), np.int64))
    wanted, more = _selection(len(stands), found, keep_pairs, chosen.matches_per_record)
    more[crowded] = True
    matches = found.take(wanted)
    witness = by.witness(matches)
    if part is None:
        of_part, verified = np.array([len(candidates)]), np.array([store.computed])
    else:
        of_part = verified = np.bincount(part[candidates[:, 0]], minlength=int(part.max(initial=-1)) + 1)
    counts = {
        "records": len(names),
        "nodes": len(stands),
        "candidates": len(candidates),
        "verified": store.computed,
        "matches": len(found),
        "stored": len(matches),
        "crowded": len(crowded),
    }
    in_records = replace(matches, pairs=stands[matches.pairs])
    return Grouping(names, stands[node_of], in_records, witness, more[node_of], members, counts, of_part, verified)


def _pins(pairs: tuple[tuple[str, str], ...], names: NDArray[np.str_]) -> Ints:
    """Pairs of ids as pairs of places in the ascending ids."""
    place = {name: i for i, name in enumerate(names.tolist())}
    for pair in pairs:
        for name in pair:
            if name not in place:
                raise UsageError(f"pinned record {name!r} is not in this composition")
    return np.array([[place[a], place[b]] for a, b in pairs], dtype=np.int64).reshape(-1, 2)


def _verify_parts(by: Searcher, store: PairStore, part: Ints) -> Ints:
    """Verify every candidate pair of nodes of one part; returns the candidates. Small parts need no tree."""
    by_part = np.argsort(part, kind="stable")
    sizes = np.bincount(part)
    place = np.arange(len(part)) - np.repeat(np.cumsum(sizes) - sizes, sizes)
    earlier = np.arange(int(place.sum())) - np.repeat(np.cumsum(place) - place, place)  # 0 ... place - 1 of each
    second = np.repeat(np.arange(len(part)), place)
    first = second - np.repeat(place, place) + earlier
    pairs = np.sort(np.stack([by_part[first], by_part[second]], axis=1), axis=1)
    pairs = filtered(by.search.prepared, by.search.coordinates, pairs, by.search.slack)
    store.ensure(pairs)
    return pairs


def _verify_plain(by: Searcher, store: PairStore, crowded_at: int) -> tuple[Ints, Ints]:
    """Verify every candidate pair but those of two crowded nodes; returns the crowded nodes and the candidates.

    Where the coordinates alone leave over DENSE pairs a node, its pairs are not even listed between nodes that have
    more than that; elsewhere a node is crowded that has more than `crowded_at` candidates after all filters.
    """
    search, owner = by.search, by.owner
    n = len(owner)
    order, points = spread_first(search.coordinates)
    slack = search.slack + ROUNDING
    counts = close_counts(points, slack)
    dense = np.zeros(n, bool)
    listed = int(counts.sum()) // 2
    if n == store.nodes and 2 * listed > DENSE * n:
        dense[order] = counts > DENSE
        listed = int(counts[counts <= DENSE].sum())
    pairs = np.sort(order[close_pairs(points, slack, dense[order], listed)], axis=1)
    pairs = owner[filtered(search.prepared, search.coordinates, pairs, search.slack)]
    pairs = np.unique(np.sort(pairs[pairs[:, 0] != pairs[:, 1]], axis=1), axis=0)
    crowded = np.zeros(store.nodes, bool)
    if n == store.nodes:  # with several versions of a node every pair is verified
        crowded = dense | (np.bincount(pairs.ravel(), minlength=n) > crowded_at)
    store.ensure(pairs[~crowded[pairs].all(axis=1)])
    return np.flatnonzero(crowded), pairs


def _families_and_groups(search: Search, store: PairStore, limit: Limit, crowded: Ints, node_rank: Ints) -> Ints:
    """Verify what the crowds need at a grade; returns the kept node of each node."""
    if not len(crowded):
        return stars(store.nodes, node_rank, store.edges(limit)[0])
    crowd = Crowd(search, limit, crowded)
    store.ensure(crowd.nearest(CROWD_NEIGHBOURS))
    is_crowded = np.zeros(store.nodes, bool)
    is_crowded[crowded] = True

    def on_demand(node: int, free: Ints) -> Ints:
        if not is_crowded[node]:
            return np.zeros(0, np.int64)
        return crowd.partners(store, node, free)

    kept = stars(store.nodes, node_rank, store.edges(limit)[0], on_demand)
    crowd.connect(store)
    return kept


def _members(
    names: NDArray[np.str_],
    rank: Ints,
    place: Ints,
    node_of: Ints,
    stands: Ints,
    family: Ints,
    kept: Ints,
    pairs: Ints,
    shift: Floats,
    strain: Floats,
) -> Members:
    """One row a record. rank: records in keep order; place: the place of each record in it."""
    best = np.full(len(stands), len(names), dtype=np.int64)
    np.minimum.at(best, node_of, place)
    keeper = rank[best]  # the best-ranked record of each node
    measured = {
        pair: (a, b) for pair, a, b in zip(map(tuple, pairs.tolist()), shift.tolist(), strain.tolist(), strict=True)
    }
    to_kept = np.zeros((len(stands), 2))
    for node, star in enumerate(kept.tolist()):
        if star != node:
            to_kept[node] = measured[(min(node, star), max(node, star))]
    group = keeper[kept[node_of]]
    return Members(
        names[stands[family[node_of]]],
        names[group],
        group == np.arange(len(names)),
        to_kept[node_of, 0],
        to_kept[node_of, 1],
    )


def _selection(nodes: int, found: Verified, always: list[Ints], most: int) -> tuple[Ints, NDArray[np.bool_]]:
    """Which matches are stored, ascending, and which nodes have more than those.

    `always`: pairs that are stored in any case. Besides, the `most` closest of each node by largest shift (rounded to
    1e-9), strain, and the other node.
    """
    count = len(found)
    ends = np.concatenate([found.pairs[:, 0], found.pairs[:, 1]])
    others = np.concatenate([found.pairs[:, 1], found.pairs[:, 0]])
    row = np.tile(np.arange(count), 2)
    shift, strain = np.round(found.largest_shift, 9)[row], np.round(found.strain, 9)[row]
    order = np.lexsort((others, strain, shift, ends))
    starts = np.searchsorted(ends[order], np.arange(nodes + 1))
    nearness = np.arange(len(order)) - np.repeat(starts[:-1], np.diff(starts))
    wanted = np.zeros(count, bool)
    wanted[row[order[nearness < most]]] = True
    codes = np.concatenate([p[:, 0] * nodes + p[:, 1] for p in always])
    wanted |= np.isin(found.pairs[:, 0] * nodes + found.pairs[:, 1], codes)
    left_out = found.pairs[~wanted]
    more = np.zeros(nodes, bool)
    more[left_out.ravel()] = True
    return np.flatnonzero(wanted), more
