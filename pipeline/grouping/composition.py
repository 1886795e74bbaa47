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
from ..model.batch import CrystalBatch, Ints, select
from ..tolerances import Tolerances
from .candidates import ROUNDING, coordinates_agree, filtered, spread_first
from .crowds import kept_nodes, nearest_pairs
from .earlier import Earlier, MayBeCrowded
from .graph import components, spanning_forest
from .hubs import find_frames
from .members import Members, members_of, selection
from .nodes import nodes_of
from .pair_store import PairStore
from .searches import Searcher, searcher, shown_as
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
class Grouping:
    """The result for one composition. Arrays over records are in ascending order of id."""

    ids: NDArray[np.str_]
    """(n,)"""

    node: Ints
    """(n,): the record (index into ids) that stands for each record's key in `matches`."""

    matches: Verified
    """Matches kept, without those of the earlier grouping; `pairs` are indices into ids, first < second."""

    witnesses: Witnesses
    """Of `matches`, row by row."""

    dropped: Ints
    """(d, 2): indices into ids of earlier matches that are among the kept ones no longer; all other earlier matches
    are."""

    added: bool
    """The earlier grouping was used: `matches` holds those of new records alone."""

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

    crowding: tuple[int, int] | None
    """Most candidates of a node, and pairs that the coordinates alone leave: what tells whether there are crowds. None
    where that was not asked, because there are few records or pairs of new ones alone were looked at."""


def group_composition(
    batch: CrystalBatch,
    keys: Sequence[str],
    ids: Sequence[str],
    rank: Sequence[int] | Ints,
    tolerances: Tolerances,
    options: Options | None = None,
    parts: Ints | None = None,
    earlier: Earlier | None = None,
) -> Grouping:
    """Matches, families and groups of the records of one composition (for `isotypic`: one species renamed to
    another's), or of several small ones.

    batch: n exact primitive crystals with the same species in the same proportions; keys: crystal_key of each; ids:
    distinct record ids; rank: smaller is kept first, ties by id. parts (n,): number from 0 of the composition of each
    record, where there are several; all have equally many species, and at most `crowded` records. Records of different
    parts are not compared. earlier: what is known of some of the records; the result is the same without it, with all
    crystals, but for the matches that are known and need not be given again. Deterministic under any order of the
    records, and whatever other parts there are.
    Raises UsageError for repeated or unknown ids, MayBeCrowded where not all crystals are there and crowds cannot be
    ruled out.
    """
    chosen = options or Options()
    if parts is not None and (chosen.search != "near" or np.bincount(parts).max(initial=0) > chosen.crowded):
        raise UsageError("several compositions in one call must be small, and are searched for near matches alone")
    nodes = nodes_of(keys, ids, rank, chosen.together, chosen.apart)
    rows = nodes.order[nodes.stands]
    shown = np.arange(len(nodes))
    place = rows
    if earlier is not None:
        shown = np.flatnonzero(earlier.there[rows])
        place = (np.cumsum(earlier.there) - 1)[rows[shown]]
    by = searcher(select(batch, place), tolerances, chosen.search, chosen.mirror_images, chosen.neighbours)
    by = by if len(shown) == len(nodes) else shown_as(by, shown, len(nodes))
    part = None if parts is None else parts[rows]
    gone = np.zeros((0, 2), np.int64)
    old, unsure = (np.zeros(len(nodes), bool),) * 2 if earlier is None else earlier.old_nodes(nodes)
    everything = len(nodes) if earlier is None else max(len(nodes), earlier.nodes)
    if part is None and len(shown) == everything:
        crowded, candidates, crowding = _candidates_plain(by, len(nodes), chosen.crowded)
        if len(nodes) <= chosen.crowded:
            crowding = None  # as where several compositions are looked at together
        if len(crowded):  # which pairs of crowds are verified depends on all of them
            earlier, old, unsure = None, np.zeros(len(nodes), bool), np.zeros(len(nodes), bool)
        candidates = candidates[~old[candidates].all(axis=1) | unsure[candidates].all(axis=1)]
    else:
        of = np.zeros(len(nodes), np.int64) if part is None else part
        candidates, close = _candidates_of_parts(by, of, old, unsure)
        crowded, crowding = np.zeros(0, np.int64), None
        if part is None and everything > chosen.crowded:
            crowding = _not_crowded(earlier, candidates, close, everything, old, chosen.crowded)
    if earlier is None:
        store = PairStore(len(nodes), by.verify, nodes.together, nodes.apart)
    else:
        known, gone = earlier.matches(nodes)
        store = PairStore(len(nodes), by.verify, nodes.together, nodes.apart, known, old, unsure)
        candidates = candidates[~store.has(candidates[:, 0] * len(nodes) + candidates[:, 1])]
    is_crowded = np.zeros(len(nodes), bool)
    is_crowded[crowded] = True
    store.ensure(candidates[~is_crowded[candidates].all(axis=1)])

    store.ensure(nearest_pairs(by.search, crowded, CROWD_NEIGHBOURS))
    frames = find_frames(by.search, store, crowded, nodes.rank) if chosen.search == "near" else []
    members: dict[str, Members] = {}
    keep_pairs: list[Ints] = []
    for grade, limit in by.limits:
        kept = kept_nodes(by.search, store, limit, crowded, frames, nodes.rank)
        edges = store.edges(limit)
        family = components(len(nodes), edges[0])
        keep_pairs.append(edges[0][spanning_forest(len(nodes), edges[0], edges[3])])
        away = np.flatnonzero(kept != np.arange(len(nodes)))
        keep_pairs.append(np.stack([np.minimum(away, kept[away]), np.maximum(away, kept[away])], axis=1))
        members[grade] = members_of(nodes, family, kept, edges)
    found = store.matches()
    if found is None:
        found = by.verify(np.zeros((0, 2), np.int64))
    wanted, more = selection(len(nodes), found, keep_pairs, chosen.matches_per_record)
    more[crowded] = True
    is_new = np.ones(len(found), bool)
    if earlier is not None:
        is_new = ~np.isin(found.pairs @ [len(nodes), 1], known.pairs @ [len(nodes), 1])
    matches = found.take(wanted & is_new)
    counts = {
        "records": len(ids),
        "nodes": len(nodes),
        "candidates": len(candidates),
        "verified": store.computed,
        "matches": len(found),
        "stored": int(wanted.sum()),
        "crowded": len(crowded),
    }
    if part is None:
        of_part, verified = np.array([len(candidates)]), np.array([store.computed])
    else:
        of_part = verified = np.bincount(part[candidates[:, 0]], minlength=int(part.max(initial=-1)) + 1)
    return Grouping(
        nodes.names,
        nodes.stands[nodes.node_of],
        replace(matches, pairs=nodes.stands[matches.pairs]),
        by.witness(matches),
        np.concatenate([gone, nodes.stands[found.pairs[~wanted & ~is_new]]]),
        earlier is not None,
        more[nodes.node_of],
        members,
        counts,
        of_part,
        verified,
        crowding,
    )


def _candidates_of_parts(
    by: Searcher, part: Ints, old: NDArray[np.bool_], unsure: NDArray[np.bool_]
) -> tuple[Ints, int]:
    """Every candidate pair of nodes of one part but those of two old ones that are not both unsure, and the number of
    pairs with a new one that the coordinates alone leave. Small parts need no search."""
    part, old, unsure = part[by.owner], old[by.owner], unsure[by.owner]
    kind = np.where(~old, 0, np.where(unsure, 1, 2))
    by_part = np.lexsort((kind, part))  # of each part the new ones first, then the unsure ones
    kind = kind[by_part]
    sizes, unknown = np.bincount(part), np.bincount(part, ~old | unsure).astype(np.int64)
    place = np.arange(len(part)) - np.repeat(np.cumsum(sizes) - sizes, sizes)
    partners = np.where(kind == 0, sizes[part[by_part]], np.where(kind == 1, unknown[part[by_part]], 0))
    others = np.maximum(partners - place - 1, 0)  # those that follow in the part
    first = np.repeat(np.arange(len(part)), others)
    second = first + 1 + np.arange(len(first)) - np.repeat(np.cumsum(others) - others, others)
    pairs = np.sort(np.stack([by_part[first], by_part[second]], axis=1), axis=1)
    close = pairs[coordinates_agree(by.search.coordinates, pairs, by.search.slack)]
    new = int((~old[close].all(axis=1)).sum())
    return by.owner[filtered(by.search.prepared, by.search.coordinates, close, by.search.slack)], new


def _not_crowded(
    earlier: Earlier | None, candidates: Ints, close: int, nodes: int, old: NDArray[np.bool_], crowded_at: int
) -> tuple[int, int]:
    """Bounds for Grouping.crowding from those of the earlier grouping and the pairs of new nodes. Raises MayBeCrowded
    where they do not rule crowds out."""
    if earlier is None or earlier.crowding is None:
        raise MayBeCrowded
    new = candidates[~old[candidates].all(axis=1)]
    number = np.bincount(new.ravel(), minlength=len(old))
    most = max(earlier.crowding[0], int(np.where(old, earlier.crowding[0] + number, number).max(initial=0)))
    close += earlier.crowding[1]
    if most > crowded_at or 2 * close > DENSE * nodes:
        raise MayBeCrowded
    return most, close


def _candidates_plain(by: Searcher, nodes: int, crowded_at: int) -> tuple[Ints, Ints, tuple[int, int] | None]:
    """The crowded nodes, every candidate pair but those that are not listed for crowds, and Grouping.crowding.

    Where the coordinates alone leave over DENSE pairs a node, its pairs are not even listed between nodes that have
    more than that; elsewhere a node is crowded that has more than `crowded_at` candidates after all filters.
    """
    search, owner = by.search, by.owner
    n = len(owner)
    order, points = spread_first(search.coordinates, None)
    slack = search.slack + ROUNDING
    counts = close_counts(points, slack)
    dense = np.zeros(n, bool)
    close = listed = int(counts.sum()) // 2
    if n == nodes and 2 * listed > DENSE * n:
        dense[order] = counts > DENSE
        listed = int(counts[counts <= DENSE].sum())
    pairs = np.sort(order[close_pairs(points, slack, dense[order], listed)], axis=1)
    pairs = owner[filtered(search.prepared, search.coordinates, pairs, search.slack)]
    pairs = np.unique(np.sort(pairs[pairs[:, 0] != pairs[:, 1]], axis=1), axis=0)
    crowded = np.zeros(nodes, bool)
    if n == nodes:  # with several versions of a node every pair is verified
        crowded = dense | (np.bincount(pairs.ravel(), minlength=n) > crowded_at)
    most = int(np.bincount(pairs.ravel()).max(initial=0))
    return np.flatnonzero(crowded), pairs, (most, close)
