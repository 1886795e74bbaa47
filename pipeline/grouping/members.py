"""From the verified pairs of a composition to its families and groups, and which of the matches are stored."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..model.batch import Floats, Ints
from .nodes import Nodes
from .verification import Verified


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


def members_of(nodes: Nodes, family: Ints, kept: Ints, edges: tuple[Ints, Floats, Floats, Floats]) -> Members:
    """One row a record. family, kept (nodes,): the smallest node of each node's family, and the kept node of its group;
    edges: of the graph of the grade, as PairStore.edges gives them."""
    pairs, shift, strain, _ = edges
    stands, node_of = nodes.stands, nodes.node_of
    best = np.full(len(nodes), len(nodes.names), dtype=np.int64)
    np.minimum.at(best, node_of, nodes.place)
    keeper = nodes.ranked[best]  # the best-ranked record of each node
    away = np.flatnonzero(kept != np.arange(len(nodes)))
    wanted = np.minimum(away, kept[away]) * len(nodes) + np.maximum(away, kept[away])
    codes = pairs[:, 0] * len(nodes) + pairs[:, 1]
    order = np.argsort(codes)
    row = order[np.searchsorted(codes, wanted, sorter=order)]
    to_kept = np.zeros((len(nodes), 2))
    to_kept[away, 0], to_kept[away, 1] = shift[row], strain[row]
    group = keeper[kept[node_of]]
    return Members(
        nodes.names[stands[family[node_of]]],
        nodes.names[group],
        group == np.arange(len(nodes.names)),
        to_kept[node_of, 0],
        to_kept[node_of, 1],
    )


def selection(
    nodes: int, found: Verified, always: list[Ints], most: int
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Which matches are stored, and which nodes have more than those.

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
    return wanted, more
