"""What an earlier grouping of the same compositions found, so that only pairs with a new record are compared again.

A grouping tells of every pair of its keys whether it matches, and how, but of pairs of two records that both have more
matches than are stored: where records were only added since, a pair of keys that still stand by the same records is as
it was.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..model.batch import Floats, Ints
from .nodes import Nodes
from .verification import NO_MATCH, Verified


class MayBeCrowded(Exception):
    """With what was added there could be crowds: which pairs of those are compared depends on all crystals."""


@dataclass(frozen=True, slots=True)
class Earlier:
    """An earlier grouping of n records and those added since, in the order they are given in."""

    old: NDArray[np.bool_]
    """(n,): the record was grouped, in that grouping, and has not changed."""

    there: NDArray[np.bool_]
    """(n,): the record's crystal is in the batch. Of the others nothing but earlier matches is asked."""

    pairs: Ints
    """(q, 2): records of its matches."""

    grade: Ints
    """(q,): 0 same, 1 near, 2 window, 3 none, under the rule for mirror images that is in force."""

    shift: Floats
    """(q,): largest shift of the match, angstrom."""

    strain: Floats
    proper_shift: Floats
    """(q,): of the best proper match; NaN where there is none."""

    proper_strain: Floats

    more: NDArray[np.bool_]
    """(n,): the record has matches that are not among these."""

    nodes: int
    """Keys of the composition, or of the largest of several: those of the n records and of others, which no match ties
    to them and nothing added can match."""

    crowding: tuple[int, int] | None = None
    """Grouping.crowding of one composition then, where that was asked."""

    def matches(self, nodes: Nodes) -> tuple[Verified, Ints]:
        """Its matches between nodes that stand by the same records as then, ascending by pair, with only those columns
        filled that groups are made from; and the others, as pairs of indices into the ids."""
        given = np.empty(len(nodes.names), np.int64)
        given[nodes.order] = np.arange(len(nodes.names))
        ends = np.sort(given[self.pairs], axis=1)
        rows = (nodes.stands[nodes.node_of[ends]] == ends).all(axis=1)
        pairs = nodes.node_of[ends[rows]]
        n = len(pairs)
        grade, nothing, no = self.grade[rows], np.full(n, np.nan), np.zeros(n, bool)
        matches = Verified(
            pairs=pairs,
            grade=np.minimum(grade, NO_MATCH - 1),  # it matches at least in the window, if only mirrored
            strain=self.strain[rows],
            shape_strain=nothing,
            volume_ratio=nothing,
            larger=np.full(n, -1, np.int64),
            largest_shift=self.shift[rows],
            rms_shift=nothing,
            improper=no,
            mirrored=no,
            proper_grade=grade,
            proper_strain=self.proper_strain[rows],
            proper_shift=self.proper_shift[rows],
            p_matrix=np.zeros((n, 3, 3), np.int64),
            q_matrix=np.zeros((n, 3, 3), np.int64),
            shift=np.zeros((n, 3)),
        )
        return matches, ends[~rows]

    def old_nodes(self, nodes: Nodes) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """(nodes,): the node stood by the same record then; and not all matches with others of this kind are known."""
        stands = nodes.order[nodes.stands]
        return np.asarray(self.old[stands]), np.asarray(self.old[stands] & self.more[stands])
