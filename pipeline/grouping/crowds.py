"""Crowds: records with so many candidates that verifying every pair would follow the number of true pairs.

Five thousand noisy copies of one crystal are twelve million pairs. Families and groups need few of them:

- a group needs its kept record against the records not yet taken (groups.py);
- a family needs one match wherever two groups touch: candidates between two components are verified only while the two
  are not yet known to be one. When none is left between different components, the components are those of the graph
  of all pairs. Of two kept records the later was free when the earlier took its matches: their pair is decided, and
  only pairs with a record that was taken are left.

Candidates are what the distances leave, and, of records that match one and the same hub, what frames.py leaves.

Both are exactly what all pairs would give. What is not complete inside a crowd is the list of matches: a record of a
crowd has its kept record, a spanning tree of its family over the pairs that were verified, and the nearest of the
pairs verified (its nearest few in the fingerprint among them), and carries the flag that there are more.
"""

from __future__ import annotations

from dataclasses import fields
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from ..fingerprint.distributions import Distributions
from ..kernels.rows_filter import rows_close
from ..model.batch import Ints, select
from .candidates import ROUNDING, SPREAD_COLUMNS, Search, allowed_pairs, start_search
from .frames import Frame, FrameFilter
from .graph import components
from .groups import stars
from .pair_store import Limit, PairStore
from .window import Window

CHUNK = 32
"""Pairs between components that are verified before the components are looked at again."""


NEAR_COLUMNS = 4
"""Coordinates in which near ones are looked up: few, because a tree of many prunes nothing."""


class _Distances:
    """What the distances of crowded nodes leave of pairs, at limits of its own."""

    def __init__(self, search: Search, limit: Limit, crowded: Ints) -> None:
        scaled = bool((search.scales != 1.0).any())
        window = search.window if scaled else Window((limit.shift,) * 3, (limit.strain,) * 3)
        batch = select(search.prepared.batch, crowded)
        sites = np.concatenate([np.arange(*search.prepared.batch.offsets[[i, i + 1]]) for i in crowded.tolist()])
        rows = Distributions(*(getattr(search.rows, f.name)[sites] for f in fields(Distributions)))
        self._inner = start_search(batch, window, search.scales[crowded], rows)
        spread = np.ptp(self._inner.coordinates, axis=0)
        widest = np.argsort(-spread, kind="stable")
        # In the order of the coordinate that spreads most a ball lies in an interval of it.
        self._order = np.argsort(self._inner.coordinates[:, widest[0]], kind="stable")
        ordered = self._inner.coordinates[self._order]
        self._line = ordered[:, widest[0]]
        self._points = np.ascontiguousarray(ordered[:, widest[:SPREAD_COLUMNS]], dtype=np.float32)
        self._at = np.argsort(self._order)

    def left(self, place: int, others: Ints) -> Ints:
        """Those of the places `others` whose crystals could match the one at `place`."""
        slack, at = self._inner.slack, int(self._at[place])
        start = int(np.searchsorted(self._line, self._line[at] - slack, side="left"))
        stop = int(np.searchsorted(self._line, self._line[at] + slack, side="right"))
        in_ball = np.zeros(len(self._order), bool)
        in_ball[self._order[rows_close(self._points, start, stop, at, slack + ROUNDING)]] = True
        others = others[in_ball[others]]
        pairs = np.stack([np.full(len(others), place), others], axis=1)
        return others[allowed_pairs(self._inner.prepared, pairs)[0]]


class Crowd:
    """The crowded nodes of a composition at one grade. Places are rows of `crowded`.

    Candidates are looked for with the limits of the grade itself, not of the window; what is verified is verified in
    the window, as everywhere.
    """

    def __init__(self, search: Search, limit: Limit, crowded: Ints, frames: list[Frame]) -> None:
        """crowded (c,): the nodes, ascending; frames: of some of them."""
        self.limit, self.crowded = limit, crowded
        self._distances = cache(lambda: _Distances(search, limit, crowded))  # needed by nodes without a frame
        self._filters = [FrameFilter(frame, limit) for frame in frames]
        self._frame = np.full(len(crowded), -1, np.int64)  # by place: number of the frame, and row in it
        self._row = np.zeros(len(crowded), np.int64)
        for number, told in enumerate(self._filters):
            places = np.searchsorted(crowded, told.members)
            self._frame[places], self._row[places] = number, np.arange(len(places))

    def _candidates(self, node: int, others: NDArray[np.bool_]) -> Ints:
        """Pairs (p, 2) of a crowded node with others (nodes,) that neither frame nor distances can rule out."""
        place = int(np.searchsorted(self.crowded, node))
        places = np.flatnonzero(others[self.crowded])
        number = int(self._frame[place])
        framed = (self._frame[places] == number) & (number >= 0)
        mates, rest = places[framed], places[~framed]
        if len(mates):
            mates = mates[self._filters[number](int(self._row[place]), self._row[mates])]
        if len(rest):
            rest = self._distances().left(place, rest)
        partners = self.crowded[np.sort(np.concatenate([mates, rest]))]
        return np.sort(np.stack([partners, np.full(len(partners), node)], axis=1), axis=1)

    def partners(self, store: PairStore, node: int, free: Ints) -> Ints:
        """Crowded nodes among `free` (ascending) that match a crowded node; verified as far as needed."""
        is_free = np.zeros(store.nodes, bool)
        is_free[free] = True
        is_free[node] = False
        pairs = self._candidates(node, is_free)
        if not len(pairs):
            return np.zeros(0, np.int64)
        store.ensure(pairs)
        return store.neighbours(pairs, self.limit, node)

    def connect(self, store: PairStore, kept: Ints) -> None:
        """Verify pairs until no candidate is left between different components of the graph at the limit.

        kept (nodes,): the kept node of each node, as `stars` made them with `partners`.
        """
        label = components(store.nodes, store.edges(self.limit)[0])
        values, counts = np.unique(label[self.crowded], return_counts=True)
        largest = values[np.argmax(counts)]
        taken = kept != np.arange(len(kept))
        # Every pair between two components has an end outside the largest one, every undecided one a taken end.
        for node in np.sort(self.crowded[label[self.crowded] != largest]).tolist():
            pairs = self._candidates(node, (label != label[node]) & (taken | taken[node]))
            pairs = pairs[~store.has(pairs[:, 0] * store.nodes + pairs[:, 1])]
            while len(pairs):
                store.ensure(pairs[:CHUNK])
                for partner in store.neighbours(pairs[:CHUNK], self.limit, node).tolist():
                    label[label == label[partner]] = label[node]
                pairs = pairs[CHUNK:]
                pairs = pairs[label[pairs[:, 0]] != label[pairs[:, 1]]]


def nearest_pairs(search: Search, crowded: Ints, count: int) -> Ints:
    """Pairs of each crowded node (ascending) with its `count` nearest ones in the coordinates that spread most."""
    if len(crowded) < 2:
        return np.zeros((0, 2), np.int64)
    coordinates = search.coordinates[crowded]
    near = coordinates[:, np.argsort(-np.ptp(coordinates, axis=0), kind="stable")[:NEAR_COLUMNS]]
    _, found = cKDTree(near).query(near, k=min(count + 1, len(crowded)), p=np.inf)
    pairs = np.stack([np.repeat(np.arange(len(near)), found.size // len(near)), found.ravel()], axis=1)
    pairs = np.sort(crowded[pairs], axis=1)
    return np.unique(pairs[pairs[:, 0] < pairs[:, 1]], axis=0)


def kept_nodes(
    search: Search, store: PairStore, limit: Limit, crowded: Ints, frames: list[Frame], node_rank: Ints
) -> Ints:
    """Verify what the crowds need at a grade; returns the kept node of each node."""
    if not len(crowded):
        return stars(store.nodes, node_rank, store.edges(limit)[0])
    crowd = Crowd(search, limit, crowded, frames)
    is_crowded = np.zeros(store.nodes, bool)
    is_crowded[crowded] = True

    def on_demand(node: int, free: Ints) -> Ints:
        if not is_crowded[node]:
            return np.zeros(0, np.int64)
        return crowd.partners(store, node, free)

    kept = stars(store.nodes, node_rank, store.edges(limit)[0], on_demand)
    crowd.connect(store, kept)
    return kept
