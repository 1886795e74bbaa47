"""Groups: stars inside a family, taken in keep order.

The best-ranked record is kept and takes its direct matches, then the best of those that are left, and so on. So every
member matches its kept record directly, and no two kept records match each other.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from ..model.batch import Ints


def stars(nodes: int, rank: Ints, edges: Ints, on_demand: Callable[[int, Ints], Ints] | None = None) -> Ints:
    """(nodes,) int64: the kept node of each node; kept nodes stand for themselves.

    rank (nodes,): a permutation, 0 is best. edges (e, 2): direct matches. on_demand(node, free): further direct
    matches of a node about to be kept, among the nodes `free` that nobody has taken; called in keep order, so that
    only those pairs need to be verified.
    """
    kept = np.full(nodes, -1, dtype=np.int64)
    both = np.concatenate([edges, edges[:, ::-1]]) if len(edges) else np.zeros((0, 2), np.int64)
    both = both[np.argsort(both[:, 0], kind="stable")]
    starts = np.searchsorted(both[:, 0], np.arange(nodes + 1))
    for node in np.argsort(rank, kind="stable").tolist():
        if kept[node] >= 0:
            continue
        kept[node] = node
        partners = both[starts[node] : starts[node + 1], 1]
        kept[partners[kept[partners] < 0]] = node
        if on_demand is not None:
            more = on_demand(node, np.flatnonzero(kept < 0))
            kept[more[kept[more] < 0]] = node
    return kept
