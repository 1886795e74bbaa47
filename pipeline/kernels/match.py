"""The best match of each pair of crystals: lattice maps, common cells, origins, pairings.

Which common cells are tried, and why no other is needed. Let A and B match in a common cell with lattice L and largest
shift D, and let L_A, L_B be their translations there. The pairing carries every translation of A to a displacement of
the sites of B that takes each within 2 D of its site plus that translation; so B has each element of L_A + L_B as an
approximate translation, and so has A. While 4 D is below the least distance of equal species these displacements
compose, and the pairing is the same after every translation of L_A and L_B together: the match already stands in the
common cell L_A intersected with L_B, with the same measures. So it is enough to take, for A and for B, every group of
approximate translations (a *variant*: the lattice G it spans, of index n over the crystal's own; the trivial one too),
to map G_A onto G_B with n_B sites(A) = n_A sites(B), and to use P and Q that span L_A intersected with L_B in G, which
then have determinants n_B and n_A. Where L_A + L_B is smaller than G, a smaller pair of variants finds the match.

Thresholds. The pinned pair has no shift, so every other pair is shifted by up to 2 D against it: pairing runs at twice
the limit, and the limit is applied after the mean is removed.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel
from .hermite import hermite, multiples_in
from .lattice_maps import adjugate3, determinant3, inverse3, lattice_maps, product3
from .match_columns import Crystals, Floats, Ints, Limits, Matches
from .paired_sites import UNIT, images_of, mean_metric, pair_up
from .pairing import length2

KEY = 24
"""Length of the integers that order matches: grade, shift, strain, P, Q, origin shift."""

PINS = 12
"""At most so many sites of the rarest species are tried as the pinned one."""


@inner
def _rows_agree(a: NDArray[np.float32], b: NDArray[np.float32], slack: float) -> bool:
    for t in range(a.shape[0]):  # noqa: SIM110 - compiled
        if abs(a[t] - b[t]) > slack:
            return False
    return True


@inner
def _pin(c: Crystals, a: int, b: int, origins: Ints) -> tuple[int, int]:
    """The site of `a` to pin and the sites of `b` it may go to: (pinned site, number of `origins` filled in).

    Of the first PINS sites of the rarest species, the one with the fewest sites of `b` whose distances agree; no match
    exists as soon as one of them has none.
    """
    kinds = c.blocks.shape[1] - 1
    rare = 0
    for s in range(1, kinds):
        if c.blocks[a, s + 1] - c.blocks[a, s] < c.blocks[a, rare + 1] - c.blocks[a, rare]:
            rare = s
    best, pinned = 1 << 60, -1
    first = c.blocks[a, rare]
    for p in range(first, min(c.blocks[a, rare + 1], first + PINS)):
        count = 0
        for q in range(c.blocks[b, rare], c.blocks[b, rare + 1]):
            if _rows_agree(c.rows[p], c.rows[q], c.slack):
                count += 1
                if count >= best:
                    break
        if count == 0:
            return -1, 0
        if count < best:
            best, pinned = count, p
    used = 0
    for q in range(c.blocks[b, rare], c.blocks[b, rare + 1]):
        if _rows_agree(c.rows[pinned], c.rows[q], c.slack):
            origins[used] = q
            used += 1
    return pinned, used


@inner
def _class_of(value: int, limits: Floats) -> int:
    """The strictest of the three limits that `value` (in UNIT) keeps; 3 for none."""
    for g in range(3):
        if value <= math.floor(limits[g] / UNIT + 1e-3):
            return g
    return 3


@inner
def _cap(best: Ints, map_class: int, shifts: Floats) -> float:
    """The largest shift that could still beat the key `best` on a map of this strain class; negative for none."""
    if best[0] > 2:
        return float(shifts[2])
    if map_class > best[0]:
        return -1.0
    cap = float(best[1] * UNIT)
    if map_class < best[0]:
        cap = max(cap, shifts[best[0] - 1])
    return cap


@inner
def _first_difference(key: Ints, best: Ints, start: int, stop: int) -> int:
    """-1 where `key` comes before `best` in the places from start to stop, 1 where after, 0 where they are equal."""
    for i in range(start, stop):
        if key[i] != best[i]:
            return -1 if key[i] < best[i] else 1
    return 0


@inner
def float_of(m: Ints) -> Floats:
    """A (3, 3) integer matrix as float64."""
    out = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            out[i, j] = m[i, j]
    return out


@inner
def _common_cell(a: Ints, u: Ints, b: Ints, p: Ints, q: Ints, w: Floats) -> bool:
    """P, Q and W = P^-1 Q of a lattice map; False where the two lattices together do not span that of the variants.

    a, b: matrices of the variants (cell = matrix @ basis); u: U with U @ basis_b the image of basis_a. A fractional
    vector of the first cell times W = a U b^-1 is the same vector in the second; P spans the x with integer x W.
    """
    det = determinant3(b)
    top = product3(product3(a, u), adjugate3(b))
    if abs(det) == 1:
        for i in range(3):
            for j in range(3):
                p[i, j] = 1 if i == j else 0
    else:
        fits, h = multiples_in(top, det)
        if not fits:
            return False
        for i in range(3):
            for j in range(3):
                p[i, j] = h[i, j]
    for i in range(3):
        for j in range(3):
            q[i, j] = (p[i, 0] * top[0, j] + p[i, 1] * top[1, j] + p[i, 2] * top[2, j]) // det
            w[i, j] = top[i, j] / det
    return True


@inner
def _record(
    key: Ints,
    p: Ints,
    q: Ints,
    s: Floats,
    largest: float,
    d: Floats,
    g: Floats,
    best: Ints,
    measures: Floats,
    shift: Floats,
) -> bool:
    """Complete `key` and take it as the best where it comes first. key[:3]: grade, shift, strain, already set."""
    order = _first_difference(key, best, 0, 3)
    if order > 0:
        return False
    for i in range(3):
        for j in range(3):
            key[3 + 3 * i + j] = p[i, j]
            key[12 + 3 * i + j] = q[i, j]
    if order == 0:
        order = _first_difference(key, best, 3, 21)
        if order > 0:
            return False
    inverse = inverse3(float_of(q))
    place = np.empty(3)
    for i in range(3):
        v = s[0] * inverse[0, i] + s[1] * inverse[1, i] + s[2] * inverse[2, i]
        place[i] = v - math.floor(v + 0.5 * UNIT)
        key[21 + i] = math.floor(place[i] / UNIT + 0.5)
    if order == 0 and _first_difference(key, best, 21, KEY) >= 0:
        return False
    square = 0.0
    for t in range(d.shape[0]):
        square += length2(g, d[t, 0], d[t, 1], d[t, 2])
    measures[0] = largest
    measures[1] = math.sqrt(square / d.shape[0])
    for i in range(3):
        shift[i] = place[i]
    for i in range(KEY):
        best[i] = key[i]
    return True


@inner
def _try_map(
    c: Crystals,
    a: int,
    b: int,
    p: Ints,
    q: Ints,
    w: Floats,
    pinned: int,
    origins: Ints,
    count: int,
    map_class: int,
    cap: float,
    shifts: Floats,
    key: Ints,
    best: Ints,
    measures: Floats,
    shift: Floats,
) -> None:
    """All origins for one lattice map: the pinned site onto each of the `count` sites of `origins`."""
    unambiguous = 4.0 * shifts[2] * math.exp(c.slack) < min(c.clear[a], c.clear[b])
    targets, target_blocks = images_of(c, a, p, w)
    g = mean_metric(c.cells[a], c.cells[b], w)
    common = hermite(q)
    size = targets.shape[0]
    pin_row = (pinned - c.offsets[a]) * (size // (c.offsets[a + 1] - c.offsets[a]))
    partner = np.empty(size, np.int64)
    images = np.empty((size, 3), np.int64)
    d = np.empty((size, 3))
    s = np.empty(3)
    for o in range(count):
        for i in range(3):
            s[i] = c.positions[origins[o], i] - targets[pin_row, i]
        limit = 2.0 * cap + 2.0 * UNIT
        largest = pair_up(c, a, b, unambiguous, targets, target_blocks, g, s, limit, cap, common, partner, images, d)
        if largest < 0:
            continue
        key[1] = math.floor(largest / UNIT + 0.5)
        shift_class = _class_of(key[1], shifts)
        if shift_class > 2:
            continue
        key[0] = max(map_class, shift_class)
        if _record(key, p, q, s, largest, d, g, best, measures, shift):
            cap = min(cap, _cap(best, map_class, shifts))


@inner
def _match_pair(c: Crystals, a: int, b: int, limits: Limits, best: Ints, measures: Floats, shift: Floats) -> None:
    """Fill best (2, KEY), measures (2, 2) and shift (2, 3) with the best proper and the best improper match."""
    if c.planar[a] != c.planar[b]:
        return
    sites_a, sites_b = c.offsets[a + 1] - c.offsets[a], c.offsets[b + 1] - c.offsets[b]
    for k in range(c.blocks.shape[1] - 1):
        if (c.blocks[a, k + 1] - c.blocks[a, k]) * sites_b != (c.blocks[b, k + 1] - c.blocks[b, k]) * sites_a:
            return
    pinned, count = -1, 0
    origins = np.empty(sites_b, np.int64)
    key = np.zeros(KEY, np.int64)
    p = np.empty((3, 3), np.int64)
    q = np.empty((3, 3), np.int64)
    w = np.empty((3, 3))
    for va in range(c.variants[a], c.variants[a + 1]):
        for vb in range(c.variants[b], c.variants[b + 1]):
            if sites_a * c.orders[vb] != sites_b * c.orders[va]:
                continue
            total, maps, strains = lattice_maps(c.bases[va], c.bases[vb], limits.strains[2], c.planar[a])
            if total == 0:
                continue
            if pinned < 0:
                pinned, count = _pin(c, a, b, origins)
                if pinned < 0:
                    return
            one_hand = determinant3(c.bases[va]) * determinant3(c.bases[vb]) > 0
            moved = max(c.moved[va], c.moved[vb])
            for hand in range(2):
                for m in range(total):
                    if (one_hand == (determinant3(maps[m]) > 0)) != (hand == 0):
                        continue
                    key[2] = math.floor(strains[m] / UNIT + 0.5)
                    map_class = _class_of(key[2], limits.strains)
                    if map_class > 2:
                        continue
                    cap = _cap(best[hand], map_class, limits.shifts)
                    if hand == 1:  # an improper match counts only where it beats the proper one
                        cap = min(cap, _cap(best[0], map_class, limits.shifts))
                    if cap < 0 or moved > 2.0 * cap * math.exp(limits.strains[2]) + UNIT:
                        continue
                    if _common_cell(c.matrices[va], maps[m], c.matrices[vb], p, q, w):
                        _try_map(
                            c,
                            a,
                            b,
                            p,
                            q,
                            w,
                            pinned,
                            origins,
                            count,
                            map_class,
                            cap,
                            limits.shifts,
                            key,
                            best[hand],
                            measures[hand],
                            shift[hand],
                        )


@kernel
def match_pairs(c: Crystals, pairs: Ints, limits: Limits) -> Matches:
    """The best matches of every pair (p, 2) of crystals of the batch."""
    n = pairs.shape[0]
    grade = np.empty((n, 2), np.int64)
    measures = np.empty((n, 2, 2))
    p = np.zeros((n, 2, 3, 3), np.int64)
    q = np.zeros((n, 2, 3, 3), np.int64)
    shift = np.zeros((n, 2, 3))
    best = np.zeros((2, KEY), np.int64)
    for i in range(n):
        for hand in range(2):
            best[hand, 0] = 3
            measures[i, hand, 0] = np.nan
            measures[i, hand, 1] = np.nan
        _match_pair(c, pairs[i, 0], pairs[i, 1], limits, best, measures[i], shift[i])
        if best[1, 0] < 3 and _first_difference(best[1], best[0], 0, 2) >= 0:
            best[1, 0] = 3
        for hand in range(2):
            grade[i, hand] = best[hand, 0]
            if best[hand, 0] < 3:
                for j in range(3):
                    for k in range(3):
                        p[i, hand, j, k] = best[hand, 3 + 3 * j + k]
                        q[i, hand, j, k] = best[hand, 12 + 3 * j + k]
    return Matches(grade, measures, p, q, shift)


def one_site() -> Crystals:
    """A batch of one crystal of one site in a unit cube: the smallest input, for compiling."""
    unit, two = np.eye(3)[None], np.array([0, 1])
    return Crystals(
        unit, two, np.zeros((1, 3)), np.array([[0, 1]]), np.zeros((1, 4), np.float32), 0.1, np.zeros(1, np.bool_),
        np.ones(1), two.copy(), unit.copy(), unit.astype(np.int64), np.ones(1, np.int64), np.zeros(1),
    )  # fmt: skip


def warm_up() -> None:
    """Compile the kernel by matching a crystal of one site with itself."""
    match_pairs(one_site(), np.zeros((1, 2), np.int64), Limits(np.full(3, 0.01), np.full(3, 0.01)))
