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
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel
from .hermite import hermite, multiples_in
from .lattice_maps import adjugate3, determinant3, inverse3, lattice_maps, log_stretches, product3
from .pairing import bottleneck_pairing, length2, nearest_pairing

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

UNIT = 1e-9
"""Shifts and strains are compared after rounding to this (angstrom; dimensionless)."""

KEY = 24
"""Length of the integers that order matches: grade, shift, strain, P, Q, origin shift."""

PINS = 12
"""At most so many sites of the rarest species are tried as the pinned one."""


class Crystals(NamedTuple):
    """Crystals ready to be matched; sites sorted by species within each crystal."""

    cells: Floats
    """(n, 3, 3), angstrom, rows."""

    offsets: Ints
    """(n + 1,)"""

    positions: Floats
    """(m, 3), fractional."""

    blocks: Ints
    """(n, kinds + 1): where the sites of each species begin, counted over the batch."""

    rows: NDArray[np.float32]
    """(m, k): ln(d + c / (exp(s) - 1)) of the distances of each site (grouping/candidates.py)."""

    slack: float
    """Two rows of a pair within the window differ by at most this in every column."""

    planar: NDArray[np.bool_]
    """(n,)"""

    clear: Floats
    """(n,): the smaller of the least distance of equal species and the least height of the cell, angstrom."""

    variants: Ints
    """(n + 1,): where the variants of each crystal begin; the first of each is the crystal's own lattice."""

    bases: Floats
    """(v, 3, 3): reduced basis of each variant's lattice, in the frame of `cells`."""

    matrices: Ints
    """(v, 3, 3): cell = matrix @ basis."""

    orders: Ints
    """(v,): |det| of the matrix."""

    moved: Floats
    """(v,): the largest displacement of a site under a translation of the variant, angstrom."""


class Limits(NamedTuple):
    """Limits of a search, from the strictest: `same`, `near`, the window. Shifts in angstrom."""

    shifts: Floats
    """(3,)"""

    strains: Floats
    """(3,)"""


class Matches(NamedTuple):
    """Best proper (column 0) and best improper (column 1) match of each pair, first crystal to second.

    The improper one is given only where it beats the proper one.
    """

    grade: Ints
    """(p, 2): 0 within `same`, 1 within `near`, 2 within the window, 3 none."""

    measures: Floats
    """(p, 2, 4): strain, shape strain, largest shift, root mean square shift."""

    p: Ints
    """(p, 2, 3, 3): P of the first crystal's cell."""

    q: Ints
    """(p, 2, 3, 3): Q of the second crystal's cell."""

    shift: Floats
    """(p, 2, 3): fractions of the common cell: site of the first + shift = site of the second, up to its own shift."""


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
def mean_metric(cell_a: Floats, cell_b: Floats, w: Floats) -> Floats:
    """(G_A + G_B) / 2 of matched cells, for vectors in fractions of cell_b; w takes fractions of cell_a to those."""
    image = product3(inverse3(w), cell_a)
    g = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            total = 0.0
            for k in range(3):
                total += image[i, k] * image[j, k] + cell_b[i, k] * cell_b[j, k]
            g[i, j] = 0.5 * total
    return g


@inner
def images_of(c: Crystals, a: int, p: Ints, w: Floats) -> tuple[Floats, Ints]:
    """Sites of crystal `a` in its cell p @ cell, in fractions of the other cell, and where its species begin.

    Site i in coset j (hermite.py) of p is row i |det p| + j.
    """
    h = hermite(p)
    index = h[0, 0] * h[1, 1] * h[2, 2]
    first = c.offsets[a]
    count = c.offsets[a + 1] - first
    out = np.empty((count * index, 3))
    k = 0
    for i in range(first, first + count):
        for n0 in range(h[0, 0]):
            for n1 in range(h[1, 1]):
                for n2 in range(h[2, 2]):
                    x, y, z = c.positions[i, 0] + n0, c.positions[i, 1] + n1, c.positions[i, 2] + n2
                    for m in range(3):
                        out[k, m] = x * w[0, m] + y * w[1, m] + z * w[2, m]
                    k += 1
    kinds = c.blocks.shape[1]
    blocks = np.empty(kinds, np.int64)
    for s in range(kinds):
        blocks[s] = (c.blocks[a, s] - first) * index
    return out, blocks


@inner
def pair_up(
    c: Crystals,
    a: int,
    b: int,
    unambiguous: bool,
    targets: Floats,
    target_blocks: Ints,
    g: Floats,
    s: Floats,
    limit: float,
    cap: float,
    common: Ints,
    partner: Ints,
    images: Ints,
    d: Floats,
) -> float:
    """Pair the sites for origin shift `s` (fractions of b's cell), take the mean out, return the largest shift.

    Negative when a site finds no partner within `limit` or the result is above `cap`. `s` is changed to the shift with
    the mean taken in, d and partner belong to it. Where the pairing is ambiguous it is taken again at the new origin
    until it stays as it is.
    """
    count = targets.shape[0]
    largest2 = -1.0
    reach = limit
    previous = np.empty((0, 4), np.int64)
    for _ in range(1 if unambiguous else 20):
        if unambiguous:
            ok = nearest_pairing(
                targets, target_blocks, c.positions, c.blocks[b], g, s[0], s[1], s[2], reach * reach, partner, images, d
            )
        else:
            first = c.offsets[b]
            ok = bottleneck_pairing(
                targets,
                target_blocks,
                c.positions[first : c.offsets[b + 1]],
                c.blocks[b] - first,
                g,
                s[0],
                s[1],
                s[2],
                reach * reach,
                common,
                partner,
                images,
                d,
            )
            if ok:
                for t in range(count):
                    partner[t] += first
        if not ok:
            return -1.0
        x, y, z = 0.0, 0.0, 0.0
        for t in range(count):
            x, y, z = x + d[t, 0], y + d[t, 1], z + d[t, 2]
        x, y, z = x / count, y / count, z / count
        s[0], s[1], s[2] = s[0] + x, s[1] + y, s[2] + z
        largest2 = 0.0
        for t in range(count):
            d[t, 0], d[t, 1], d[t, 2] = d[t, 0] - x, d[t, 1] - y, d[t, 2] - z
            largest2 = max(largest2, length2(g, d[t, 0], d[t, 1], d[t, 2]))
        if unambiguous:
            break
        same = previous.shape[0] == count
        if same:
            for t in range(count):
                if previous[t, 0] != partner[t]:
                    same = False
                for m in range(3):
                    if previous[t, m + 1] != images[t, m]:
                        same = False
        if same:
            break
        previous = np.empty((count, 4), np.int64)
        for t in range(count):
            previous[t, 0] = partner[t]
            for m in range(3):
                previous[t, m + 1] = images[t, m]
        reach = math.sqrt(largest2) + UNIT
    largest = math.sqrt(largest2)
    return largest if largest <= cap + UNIT else -1.0


@inner
def _unit() -> Ints:
    """The integer unit matrix."""
    out = np.zeros((3, 3), np.int64)
    for i in range(3):
        out[i, i] = 1
    return out


@inner
def _match_pair(
    c: Crystals,
    a: int,
    b: int,
    limits: Limits,
    grade: Ints,
    measures: Floats,
    out_p: Ints,
    out_q: Ints,
    out_shift: Floats,
) -> None:
    """Fill row arrays (2,), (2, 4), (2, 3, 3), (2, 3, 3), (2, 3) with the best proper and improper match."""
    window = limits.shifts[2]
    best = np.zeros((2, KEY), np.int64)
    best[0, 0] = 3
    best[1, 0] = 3
    key = np.zeros(KEY, np.int64)
    grade[0] = 3
    grade[1] = 3
    if c.planar[a] != c.planar[b]:
        return
    sites_a, sites_b = c.offsets[a + 1] - c.offsets[a], c.offsets[b + 1] - c.offsets[b]
    kinds = c.blocks.shape[1] - 1
    for k in range(kinds):
        if (c.blocks[a, k + 1] - c.blocks[a, k]) * sites_b != (c.blocks[b, k + 1] - c.blocks[b, k]) * sites_a:
            return
    unambiguous = 4.0 * window * math.exp(limits.strains[2]) < min(c.clear[a], c.clear[b])
    pinned, count = -1, 0
    origins = np.empty(sites_b, np.int64)
    s = np.empty(3)
    for va in range(c.variants[a], c.variants[a + 1]):
        for vb in range(c.variants[b], c.variants[b + 1]):
            na, nb = c.orders[va], c.orders[vb]
            if sites_a * nb != sites_b * na:
                continue
            total, maps, strains = lattice_maps(c.bases[va], c.bases[vb], limits.strains[2], c.planar[a])
            if total == 0:
                continue
            if pinned < 0:
                pinned, count = _pin(c, a, b, origins)
                if pinned < 0:
                    return
            hand_a, hand_b = determinant3(c.bases[va]), determinant3(c.bases[vb])
            adjugate = adjugate3(c.matrices[vb])
            det_b = determinant3(c.matrices[vb])
            inverse_a = inverse3(c.bases[va])
            for hand in range(2):
                for m in range(total):
                    u = maps[m]
                    proper = (hand_a * hand_b > 0) == (determinant3(u) > 0)
                    if proper != (hand == 0):
                        continue
                    strain9 = math.floor(strains[m] / UNIT + 0.5)
                    map_class = _class_of(strain9, limits.strains)
                    if map_class > 2:
                        continue
                    cap = _cap(best[hand], map_class, limits.shifts)
                    if hand == 1 and cap >= 0:
                        cap = min(cap, _cap(best[0], map_class, limits.shifts))
                    if cap < 0 or max(c.moved[va], c.moved[vb]) > 2.0 * cap * math.exp(limits.strains[2]) + UNIT:
                        continue
                    top = product3(product3(c.matrices[va], u), adjugate)
                    if nb == 1:
                        p = _unit()
                    else:
                        fits, p = multiples_in(top, det_b)
                        if not fits:
                            continue
                    q = product3(p, top)
                    w = np.empty((3, 3))
                    for i in range(3):
                        for j in range(3):
                            q[i, j] //= det_b
                            w[i, j] = top[i, j] / det_b
                    targets, target_blocks = images_of(c, a, p, w)
                    g = mean_metric(c.cells[a], c.cells[b], w)
                    common = hermite(q)
                    pin_row = (pinned - c.offsets[a]) * nb
                    partner = np.empty(targets.shape[0], np.int64)
                    images = np.empty((targets.shape[0], 3), np.int64)
                    d = np.empty((targets.shape[0], 3))
                    for o in range(count):
                        for i in range(3):
                            s[i] = c.positions[origins[o], i] - targets[pin_row, i]
                        largest = pair_up(
                            c,
                            a,
                            b,
                            unambiguous,
                            targets,
                            target_blocks,
                            g,
                            s,
                            2.0 * cap + 2.0 * UNIT,
                            cap,
                            common,
                            partner,
                            images,
                            d,
                        )
                        if largest < 0:
                            continue
                        key[1] = math.floor(largest / UNIT + 0.5)
                        key[2] = strain9
                        shift_class = _class_of(key[1], limits.shifts)
                        if shift_class > 2:
                            continue
                        key[0] = max(map_class, shift_class)
                        order = 0
                        for i in range(3):
                            if key[i] != best[hand, i]:
                                order = -1 if key[i] < best[hand, i] else 1
                                break
                        if order > 0:
                            continue
                        for i in range(3):
                            for j in range(3):
                                key[3 + 3 * i + j] = p[i, j]
                                key[12 + 3 * i + j] = q[i, j]
                        if order == 0:
                            for i in range(3, 21):
                                if key[i] != best[hand, i]:
                                    order = -1 if key[i] < best[hand, i] else 1
                                    break
                            if order > 0:
                                continue
                        float_q = np.empty((3, 3))
                        for i in range(3):
                            for j in range(3):
                                float_q[i, j] = q[i, j]
                        inverse_q = inverse3(float_q)
                        for i in range(3):
                            v = s[0] * inverse_q[0, i] + s[1] * inverse_q[1, i] + s[2] * inverse_q[2, i]
                            v -= math.floor(v + 0.5 * UNIT)
                            key[21 + i] = math.floor(v / UNIT + 0.5)
                        if order == 0:
                            order = 1
                            for i in range(21, KEY):
                                if key[i] != best[hand, i]:
                                    order = -1 if key[i] < best[hand, i] else 1
                                    break
                            if order > 0:
                                continue
                        for i in range(KEY):
                            best[hand, i] = key[i]
                        grade[hand] = key[0]
                        low, middle, high = log_stretches(inverse_a, product3(float_of(u), c.bases[vb]))
                        mean = (low + middle + high) / 3.0
                        square = 0.0
                        for t in range(targets.shape[0]):
                            square += length2(g, d[t, 0], d[t, 1], d[t, 2])
                        measures[hand, 0] = max(-low, high)
                        measures[hand, 1] = max(mean - low, high - mean)
                        measures[hand, 2] = largest
                        measures[hand, 3] = math.sqrt(square / targets.shape[0])
                        for i in range(3):
                            v = s[0] * inverse_q[0, i] + s[1] * inverse_q[1, i] + s[2] * inverse_q[2, i]
                            out_shift[hand, i] = v - math.floor(v + 0.5 * UNIT)
                            for j in range(3):
                                out_p[hand, i, j] = p[i, j]
                                out_q[hand, i, j] = q[i, j]
                        cap = min(cap, _cap(best[hand], map_class, limits.shifts))
    if grade[1] < 3 and (best[0, 0] < best[1, 0] or (best[0, 0] == best[1, 0] and best[0, 1] <= best[1, 1])):
        grade[1] = 3


@inner
def float_of(m: Ints) -> Floats:
    """A (3, 3) integer matrix as float64."""
    out = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            out[i, j] = m[i, j]
    return out


@kernel
def match_pairs(c: Crystals, pairs: Ints, limits: Limits) -> Matches:
    """The best matches of every pair (p, 2) of crystals of the batch."""
    n = pairs.shape[0]
    grade = np.full((n, 2), 3, np.int64)
    measures = np.full((n, 2, 4), np.nan)
    p = np.zeros((n, 2, 3, 3), np.int64)
    q = np.zeros((n, 2, 3, 3), np.int64)
    shift = np.zeros((n, 2, 3))
    for i in range(n):
        _match_pair(c, pairs[i, 0], pairs[i, 1], limits, grade[i], measures[i], p[i], q[i], shift[i])
    return Matches(grade, measures, p, q, shift)
