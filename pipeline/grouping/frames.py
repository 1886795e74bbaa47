"""Frames: the crystals of a crowd seen from one that all of them match, its hub.

Noisy copies of one crystal look alike in their distances, because a distance may change by twice the shift; in the
sites themselves most pairs that do not match differ by too much at the first or second one. So a hub is taken and
compared with the others, as everywhere; afterwards a pair of them is ruled out from what was found there, without
lattice maps, origins and pairings of its own.

Setting. K is the hub, with the lattice L and the sites x(k). A member A has a match with K: strain s_A, and each site i
of A in the common cell stands at x(k) + u_A(i), where k is the site of K it is paired with, in the coordinates of K.
M_A is the largest |u_A| in the metric of K. (Lengths below are in that metric.) Let A and B be members, and let them
match with largest shift D and strain s. The match takes vectors by a linear map, which in the coordinates of K is a
matrix W, and pairs site i of A with site j of B, where

    x(k') + u_B(j) = (x(k) + u_A(i)) W + t + delta(i).

1. |delta| <= D' = D exp(s/2 + s_B): D is measured in the mean of the metric of B, at least exp(-2 s_B) times that of K,
   and of the one of A carried over, at least exp(-2 s) times that of B; so the mean is at least exp(-s - 2 s_B) times
   that of K. W has strain at most s' = s_A + s + s_B, as stretches of products multiply.
2. Pairings are one to one, so k -> k' = F(k) is a permutation of all sites of the infinite crystal K that keeps
   species, and x(k') = x(k) W + t + r(k) with |r| <= R = M_B + exp(s') M_A + D'.
3. W takes L onto L. For a translation l of L, the permutation F(F^-1(k) + l) takes each site k to within 2 R of x(k) +
   l W. Let p be a site of the rarest species, and q its image. If q is no lattice translate of p, then x(q) - x(p)
   takes every site to within 4 R of a like one; such a K is no hub (nearly_translated). So q = p + l' with l' in L, l W
   - l' is at most 2 R long, and every site k goes to within 4 R of k + l', that is to k + l' itself, since 4 R is below
   the distance of like sites. Some multiple m l is a translation of A, B and K together, for which F(k + m l) = F(k) +
   m l W; hence m l W = m l', and l W = l'. The same holds for the inverse.
4. F(k + l) = F(k) + l W, since the two sides lie within 2 R of each other. So W and F are one of the ways to lay K onto
   itself with strain s' and reach R, all of which are known (kernels/self_maps.py).
5. Solved for the members, u_B(j) - u_A(i) W - (x(k) W + t - x(k')) = delta(i). Over the common cell of A and B each
   site k stands equally often, and so do the sites of A and of B that are paired with it. The mean over those is taken:
   u(k), the mean of u over all sites paired with k, keeps the bound, whatever supercells A and B are. The mean of delta
   over all sites is zero, as D is measured with the mean shift removed, so the means over all sites may be removed from
   u and from the offsets of the way. Hence a match needs a way, W and F, with

       |u_B(F(k)) - u_A(k) W - offset(k)| <= D'  for every site k of K.

   Without the means over images: each u_A(i) has a u_B(j) of a site j paired with F(k) for which the same holds, and
   the other way round.
6. Any vector v of K is changed in length by a factor between exp(-s) and exp(s) from A to v W in B.

A pair for which no way passes 5 and 6 does not match at the limit. The rest is verified, as everywhere. Layers:
stretches are those of the plane, translations lie in it, and heights are kept; nothing changes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..kernels.frames import not_ruled_out, probe_lengths, seen_from
from ..kernels.rows_filter import rows_close
from ..kernels.self_maps import nearly_translated, self_maps
from ..model.batch import Floats, Ints
from .candidates import ROUNDING, Search, allowed_pairs, spread_first
from .pair_store import Limit, PairStore

FEWEST = 32
"""A hub with fewer members is not worth its frame."""

EXTRA = 2
"""Comparisons with hubs, for each node of the crowd, after which no further hub is looked for."""

MARGIN = 1e-7
"""What rounding may add to shifts (angstrom) and strains: measured ones are compared after rounding to 1e-9."""


@dataclass(frozen=True, slots=True)
class Frame:
    """A hub and the nodes that match it in the window with a pairing that is unique."""

    hub: int
    members: Ints
    """(f,): nodes, ascending."""

    moved: Floats
    """(f, n, 3): u(k) of each, Cartesian in the frame of the hub, mean removed; sites as in `Crystals`. Angstrom."""

    starts: Ints
    """(f + 1,): where the images of each begin."""

    images: Floats
    """(s, 3): u(i) of all sites i in the common cell, likewise, those of the first site k first."""

    farthest: Floats
    """(f,): M of each, angstrom."""

    metrics: Floats
    """(f, 3, 3): of the hub's cell as the member has it, square angstrom."""

    strains: Floats
    """(f,): of the match with the hub."""

    def take(self, rows: Ints) -> Frame:
        """Some of the members."""
        sizes = np.diff(self.starts)[rows]
        starts = np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
        images = np.arange(starts[-1]) + np.repeat(self.starts[rows] - starts[:-1], sizes)
        return Frame(
            self.hub,
            self.members[rows],
            self.moved[rows],
            starts,
            self.images[images],
            self.farthest[rows],
            self.metrics[rows],
            self.strains[rows],
        )


def find_frames(search: Search, store: PairStore, crowded: Ints, rank: Ints) -> list[Frame]:
    """Hubs for as many of the crowded nodes (ascending) as are worth it; verifies them against the others.

    search: not scaled, one row a node. Around the first node without a frame, the best-ranked is taken from the more
    central half of those with no approximate translation.
    """
    c = search.prepared.crystals
    order, points = spread_first(search.coordinates[crowded])
    nodes, middle_of = crowded[order], search.coordinates[crowded[order]]
    slack = search.slack + ROUNDING
    plain = np.diff(c.variants)[nodes] == 1
    free = np.ones(len(nodes), bool)
    frames, spent = [], 0
    for seed in np.argsort(nodes).tolist():
        if not free[seed]:
            continue
        free[seed] = False
        near = rows_close(points, 0, len(points), seed, slack)
        near = near[free[near] | (near == seed)]
        fit = near[plain[near]]
        if len(near) <= FEWEST or not len(fit) or spent + len(near) > EXTRA * len(nodes):
            continue
        off = np.abs(middle_of[fit] - np.median(middle_of[near], axis=0)).sum(axis=1)
        central = nodes[fit[np.argsort(off, kind="stable")[: (len(fit) + 1) // 2]]]
        hub = int(central[np.argmin(rank[central])])
        others = nodes[near[nodes[near] != hub]]
        pairs = np.sort(np.stack([np.full(len(others), hub), others], axis=1), axis=1)
        pairs = pairs[allowed_pairs(search.prepared, pairs)[0]]
        spent += len(pairs)
        store.ensure(pairs)
        frame = _frame(search, store, hub, np.sort(pairs.sum(axis=1) - hub))
        if len(frame.members) >= FEWEST:
            frames.append(frame)
            free[np.isin(nodes, frame.members) | (nodes == hub)] = False
    return frames


def _frame(search: Search, store: PairStore, hub: int, others: Ints) -> Frame:
    """The frame of a hub whose pairs with `others` (ascending) have been verified."""
    found = store.matches()
    if found is None:
        raise ValueError("nothing has been verified")
    codes = np.minimum(others, hub) * store.nodes + np.maximum(others, hub)
    found = found.take(np.isin(found.pairs[:, 0] * store.nodes + found.pairs[:, 1], codes))
    found = found.take(np.argsort(found.pairs.sum(axis=1), kind="stable"))
    first = found.pairs[:, 1] == hub  # the member comes first
    members = found.pairs.sum(axis=1) - hub
    q = np.where(first[:, None, None], found.q_matrix, found.p_matrix)
    sites = int(search.prepared.batch.offsets[hub + 1] - search.prepared.batch.offsets[hub])
    sizes = sites * np.abs(np.rint(np.linalg.det(q))).astype(np.int64)
    starts = np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
    moved, images, farthest, metrics, unique = seen_from(
        search.prepared.crystals,
        hub,
        members,
        np.where(first[:, None, None], found.p_matrix, found.q_matrix),
        q,
        np.where(first[:, None], found.shift, -found.shift),
        found.largest_shift,
        search.window.shift,
        starts,
    )
    whole = Frame(hub, members, moved, starts, images, farthest, metrics, found.strain)
    return whole.take(np.flatnonzero(unique))


class FrameFilter:
    """A frame at one limit: which of its members could match."""

    def __init__(self, search: Search, frame: Frame, limit: Limit) -> None:
        c, hub = search.prepared.crystals, frame.hub
        strain = float(frame.strains.max()) + MARGIN
        total = 2.0 * strain + limit.strain + MARGIN
        reach = (limit.shift + MARGIN) * math.exp(0.5 * limit.strain + strain)
        grown = 1.0 + math.exp(total)
        room = (1.0 - 1e-6) * float(c.clear[hub]) / 8.0
        inside = frame.farthest * grown + reach < room
        radius = float(frame.farthest[inside].max(initial=0.0)) * grown + reach + MARGIN
        if radius > room or nearly_translated(c, hub, 4.0 * radius):
            inside[:] = False
        self._frame = frame.take(np.flatnonzero(inside))
        self._cell, self._reach, self._slack = c.cells[hub], reach + MARGIN, limit.strain + MARGIN
        self._lengths = probe_lengths(self._frame.metrics)
        self._ways = self_maps(c, hub, total, radius) if inside.any() else None

    @property
    def members(self) -> Ints:
        """(f,): the nodes that the filter can tell of, ascending; none where the hub is no hub at this limit."""
        return self._frame.members

    def __call__(self, row: int, others: Ints) -> NDArray[np.bool_]:
        """Which of the members at rows `others` could match the member at `row`, at the limit."""
        if self._ways is None:
            raise ValueError("a frame without members")
        f = self._frame
        return not_ruled_out(
            self._cell,
            *self._ways,
            f.moved,
            f.images,
            f.starts,
            f.metrics,
            self._lengths,
            row,
            others,
            self._reach,
            self._slack,
        )
