"""The nodes that the graphs of a composition have: one a crystal_key, and one a record that a pin names."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..errors import UsageError
from ..model.batch import Ints

PairsOfIds = tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class Nodes:
    """Records and the nodes they belong to. Records are in ascending order of id, and so are nodes, by the smallest."""

    names: NDArray[np.str_]
    """(n,): ids, ascending."""

    order: Ints
    """(n,): the place of each in what was given."""

    ranked: Ints
    """(n,): records in keep order."""

    place: Ints
    """(n,): the place of each record in `ranked`."""

    stands: Ints
    """(nodes,): the record with the smallest id of each node."""

    node_of: Ints
    """(n,): the node of each record."""

    rank: Ints
    """(nodes,): place of the best-ranked record of each node."""

    together: Ints
    """(p, 2): pairs of nodes pinned together."""

    apart: Ints
    """(q, 2): pairs of nodes pinned apart."""

    def __len__(self) -> int:
        return len(self.stands)


def nodes_of(
    keys: Sequence[str], ids: Sequence[str], rank: Sequence[int] | Ints, together: PairsOfIds, apart: PairsOfIds
) -> Nodes:
    """The nodes of records. Raises UsageError for repeated ids and for pins of records that are not there."""
    order = np.argsort(np.array(ids, dtype=str), kind="stable").astype(np.int64)
    names = np.array(ids, dtype=str)[order]
    if len(np.unique(names)) != len(names):
        raise UsageError("record ids of a composition must be distinct")
    ranked = np.lexsort((names, np.asarray(rank)[order]))
    place = np.empty(len(names), np.int64)
    place[ranked] = np.arange(len(names))
    drawn, torn = _places(together, names), _places(apart, names)
    single = np.zeros(len(names), bool)
    single[np.concatenate([drawn.ravel(), torn.ravel()])] = True
    marks = [f"{k} {names[i]}" if single[i] else k for i, k in enumerate(np.array(keys, dtype=str)[order].tolist())]
    _, first, node_of = np.unique(marks, return_index=True, return_inverse=True)
    by_id = np.argsort(first)  # nodes in ascending order of the id that stands for them
    renumber = np.empty_like(by_id)
    renumber[by_id] = np.arange(len(by_id))
    stands, node_of = first[by_id], renumber[node_of]
    best = np.full(len(stands), len(names), dtype=np.int64)
    np.minimum.at(best, node_of, place)
    return Nodes(names, order, ranked, place, stands, node_of, best, node_of[drawn], node_of[torn])


def _places(pairs: PairsOfIds, names: NDArray[np.str_]) -> Ints:
    """Pairs of ids as pairs of places in the ascending ids."""
    place = {name: i for i, name in enumerate(names.tolist())}
    for pair in pairs:
        for name in pair:
            if name not in place:
                raise UsageError(f"pinned record {name!r} is not in this composition")
    return np.array([[place[a], place[b]] for a, b in pairs], dtype=np.int64).reshape(-1, 2)
