"""Frames: the crystals of a crowd seen from one that all of them match, its hub.

Noisy copies of one crystal look alike in their distances, because a distance may change by twice the shift; in the
sites themselves most pairs that do not match differ by too much at the first or second one. So a hub is taken and
compared with the others, as everywhere; afterwards a pair of them is ruled out from what was found there, without
lattice maps, origins and pairings of its own.

Setting. K is the hub, whether it is a record or not, with the lattice L and the sites x(k). A member A has a match with
K: strain s_A, and each site i of A in the common cell stands at x(k) + u_A(i), where k is the site of K it is paired
with, in the coordinates of K. M_A is the largest |u_A| in the metric of K. (Lengths below are in that metric.) Let A
and B be members, and let them match with largest shift D and strain s. The match takes vectors by a linear map, which
in the coordinates of K is a matrix W, and pairs site i of A with site j of B, where

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
   itself with strain s' and reach R, all of which are known (self_maps.py).
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

from ..kernels.frames import not_ruled_out, seen_from
from ..kernels.match_columns import Crystals
from ..model.batch import Floats, Ints
from .pair_store import Limit
from .self_maps import nearly_translated, self_maps
from .verification import Verified

PROBES = np.array([[1, 0, 0], [0, 1, 0], [0, 0, 1], [1, 1, 0], [1, 0, 1], [0, 1, 1]], dtype=np.float64)
"""Lattice vectors whose lengths are compared."""

MARGIN = 1e-7
"""What rounding may add to shifts (angstrom) and strains: measured ones are compared after rounding to 1e-9."""


@dataclass(frozen=True, slots=True)
class Frame:
    """A hub (hubs.py) and the nodes that match it in the window with a pairing that is unique."""

    crystals: Crystals
    """The hub's batch."""

    hub: int
    """Row of the hub in it."""

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
            self.crystals,
            self.hub,
            self.members[rows],
            self.moved[rows],
            starts,
            self.images[images],
            self.farthest[rows],
            self.metrics[rows],
            self.strains[rows],
        )

    def with_hub(self, node: int) -> Frame:
        """The frame of a hub that is a node itself, with it for a member."""
        cell, sites = self.crystals.cells[self.hub], self.moved.shape[1]
        more = Frame(
            self.crystals,
            self.hub,
            np.append(self.members, node),
            np.concatenate([self.moved, np.zeros((1, sites, 3))]),
            np.append(self.starts, self.starts[-1] + sites),
            np.concatenate([self.images, np.zeros((sites, 3))]),
            np.append(self.farthest, 0.0),
            np.concatenate([self.metrics, (cell @ cell.T)[None]]),
            np.append(self.strains, 0.0),
        )
        return more.take(np.argsort(more.members))


def frame_of(crystals: Crystals, hub: int, nodes: Ints, found: Verified, shift: float) -> Frame:
    """The frame of row `hub` of a batch, from matches between it and other rows.

    nodes (n,): ascending but for the hub: the node that each row stands for; shift: of the window searched in.
    """
    found = found.take(np.argsort(found.pairs.sum(axis=1), kind="stable"))
    first = found.pairs[:, 1] == hub  # the member comes first
    rows = found.pairs.sum(axis=1) - hub
    q = np.where(first[:, None, None], found.q_matrix, found.p_matrix)
    sites = int(crystals.offsets[hub + 1] - crystals.offsets[hub])
    sizes = sites * np.abs(np.rint(np.linalg.det(q))).astype(np.int64)
    starts = np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
    moved, images, farthest, metrics, unique = seen_from(
        crystals,
        hub,
        rows,
        np.where(first[:, None, None], found.p_matrix, found.q_matrix),
        q,
        np.where(first[:, None], found.shift, -found.shift),
        found.largest_shift,
        shift,
        starts,
    )
    whole = Frame(crystals, hub, nodes[rows], moved, starts, images, farthest, metrics, found.strain)
    return whole.take(np.flatnonzero(unique))


class FrameFilter:
    """A frame at one limit: which of its members could match."""

    def __init__(self, frame: Frame, limit: Limit) -> None:
        c, hub = frame.crystals, frame.hub
        strain = float(frame.strains.max(initial=0.0)) + MARGIN
        total = 2.0 * strain + limit.strain + MARGIN
        reach = (limit.shift + MARGIN) * math.exp(0.5 * limit.strain + strain)
        grown = 1.0 + math.exp(total)
        room = (1.0 - 1e-6) * float(c.clear[hub]) / 8.0
        inside = frame.farthest * grown + reach < room
        radius = float(frame.farthest[inside].max(initial=0.0)) * grown + reach + MARGIN
        if radius > room or nearly_translated(c, hub, 4.0 * radius):
            inside[:] = False
        self._frame = frame.take(np.flatnonzero(inside))
        self._reach, self._slack = reach + MARGIN, limit.strain + MARGIN
        self._lengths = _log_lengths(PROBES, self._frame.metrics)
        if inside.any():
            cell = c.cells[hub]
            maps, partners, offsets = self_maps(c, hub, total, radius)
            self._turn = np.linalg.inv(cell) @ maps @ cell  # W in the Cartesian frame of the hub
            self._offsets = offsets @ cell
            self._sources = np.argsort(partners, axis=1)  # F^-1
            self._probes = PROBES @ np.linalg.inv(maps)

    @property
    def members(self) -> Ints:
        """(f,): the nodes that the filter can tell of, ascending; none where the hub is no hub at this limit."""
        return self._frame.members

    def __call__(self, row: int, others: Ints) -> NDArray[np.bool_]:
        """Which of the members at rows `others` could match the member at `row`, at the limit."""
        f = self._frame
        ways, sites = self._sources.shape
        own = f.images[f.starts[row] : f.starts[row + 1]]
        images = (own @ self._turn).reshape(ways, sites, -1, 3) + self._offsets[:, :, None]
        expected = f.moved[row] @ self._turn + self._offsets
        return not_ruled_out(
            np.take_along_axis(expected, self._sources[:, :, None], axis=1),
            np.take_along_axis(images, self._sources[:, :, None, None], axis=1).reshape(ways, -1, 3),
            _log_lengths(self._probes, f.metrics[row]),
            f.moved,
            f.images,
            f.starts,
            self._lengths,
            others,
            self._reach,
            self._slack,
        )


def _log_lengths(vectors: Floats, metrics: Floats) -> Floats:
    """Logarithms of the lengths of vectors (..., w, 3) in metrics (..., 3, 3), which go with the vectors' leading
    axes."""
    return np.asarray(0.5 * np.log((vectors @ metrics * vectors).sum(axis=-1)))
