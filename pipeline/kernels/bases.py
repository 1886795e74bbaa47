"""All Niggli-reduced bases of a lattice, up to the tolerance (compiled).

With a tolerance, a lattice close to a higher symmetry has several reduced bases whose metrics differ by rounding, and
which of them a reduction ends in depends on where it began. The set of all of them does not: it is a property of the
lattice. The canonical form is chosen from the whole set.

Why the search is exact. In a reduced basis |a|, |b|, |c| are the successive minima. A vector v of such a basis is a
shortest one of its class modulo twice the lattice: were w = v + 2u shorter, then s = (v + w)/2 and t = (v - w)/2 would
both be shorter than v, lie in the span of the basis vectors shorter than v, and so would v = s + t. In an obtuse
superbase v0 + v1 + v2 + v3 = 0 with p_ij = -v_i.v_j >= 0, a vector sum n_i v_i has the square
sum over i < j of p_ij (n_i - n_j)^2 (Selling 1874), and in a shortest one of its class each difference n_i - n_j is 0
or +-1 wherever p_ij > 0. The pairs with p_ij > 0 connect all four (else the volume, a sum over spanning trees, were
zero), so that any two n differ by 3 at most.

The tolerance changes this as follows. A basis reduced within epsilon becomes reduced exactly when each of its six
numbers moves by at most 2 epsilon, which moves the square of a vector with coefficients up to 3 by at most
2 epsilon (9 + 9 + 9 + 9 + 9 + 9) = 108 epsilon < SLACK epsilon. A difference of 2 or more over a pair costs at least
3 p_ij, so the bound of 3 holds when the pairs with p_ij > SLACK epsilon / 3 connect all four; this is checked, and
where it fails (an edge under a fiftieth of the cube root of the volume) the bound |n_i| <= |v| |v_i*| is used alone.
Each triple found is then put to the conditions themselves.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner
from .integers import set_unit
from .niggli import add_row, next_step, six_numbers
from .vectors import plane_spacing, row_dot, through, through_float, volume

SLACK = 128.0
"""Squares of basis vectors of two reduced bases agree within this many epsilon (see above)."""

MOST_BASES = 192
"""Room for bases. A lattice has at most 24 proper automorphisms; the rest is for near-degenerate cells."""

MOST_VECTORS = 128
MOST_TRIED = 2_000_000
"""Coefficient triples above which the search is given up: an edge some hundreds of times shorter than the others."""


@inner
def superbase_vectors(s: Ints, cell: Floats, scale: float, v: Floats) -> None:
    """v = scale s cell, for s (4, 3) int64 and v (4, 3) float64."""
    for i in range(4):
        for k in range(3):
            v[i, k] = scale * (s[i, 0] * cell[0, k] + s[i, 1] * cell[1, k] + s[i, 2] * cell[2, k])


@inner
def obtuse_superbase(cell: Floats, s: Ints) -> bool:
    """Fill s (4, 3) int64: rows are the obtuse superbase of a cell (3, 3) in its own basis (Selling 1874).

    For a reduced cell few steps are needed. Returns False where they do not come to an end.
    """
    set_unit(s)
    for k in range(3):
        s[3, k] = -1
    v = np.empty((4, 3))
    tiny = 1e-12 * abs(volume(cell)) ** (2.0 / 3.0)
    for _ in range(200):
        superbase_vectors(s, cell, 1.0, v)
        worst, p, q = tiny, -1, -1
        for i in range(4):
            for j in range(i + 1, 4):
                dot = row_dot(v, i, v, j)
                if dot > worst:
                    worst, p, q = dot, i, j
        if p < 0:
            return True
        for i in range(4):
            if i != p and i != q:
                add_row(s, i, 1, p)
        add_row(s, p, -2, p)
    return False


@inner
def connected(v: Floats, least: float) -> bool:
    """Whether the pairs of superbase vectors (4, 3) with -v_i.v_j > least connect all four."""
    reached = np.zeros(4, np.uint8)
    reached[0] = 1
    for _ in range(3):
        for i in range(4):
            for j in range(4):
                if reached[i] == 1 and reached[j] == 0 and -row_dot(v, i, v, j) > least:
                    reached[j] = 1
    return bool(reached[1] + reached[2] + reached[3] == 3)


@inner
def triple_determinant(v: Ints, i: int, j: int, h: int) -> int:
    """The determinant of rows i, j, h of v (n, 3) int64."""
    total = 0
    for a in range(3):
        b, c = (a + 1) % 3, (a + 2) % 3
        total += v[i, a] * (v[j, b] * v[h, c] - v[j, c] * v[h, b])
    return total


@inner
def reduced_bases(cell: Floats, epsilon: float, out: Ints) -> int:
    """All matrices M (3, 3), det +1, for which M cell is Niggli-reduced at a tolerance; returns their number.

    cell (3, 3) right-handed and reduced at this tolerance or at one of the smaller levels (niggli.py), so that its
    edges are the successive minima up to the slack; `out` is (MOST_BASES, 3, 3) int64. The unit matrix comes first,
    where it belongs to them. There may be none (0). Returns -1 where the search cannot be carried out (see the head of
    this file).
    """
    s = np.empty((4, 3), np.int64)
    if not obtuse_superbase(cell, s):
        return -1
    unit = abs(volume(cell)) ** (-1.0 / 3.0)
    superbase = np.empty((4, 3))
    superbase_vectors(s, cell, unit, superbase)
    slack = SLACK * epsilon
    squares = np.empty(3)
    for row in range(3):
        squares[row] = unit * unit * row_dot(cell, row, cell, row)
    longest = squares[2] + slack
    joined = connected(superbase, slack / 3.0)
    reach = np.empty(3, np.int64)
    tried = 1
    for i in range(3):
        bound = np.sqrt(longest) / plane_spacing(superbase, i) + 1e-9  # |v| |v_i*|
        reach[i] = int(min(bound, 3.0 if joined else 1e5))
        tried *= 2 * reach[i] + 1
        if tried > MOST_TRIED:
            return -1

    # Vectors of the length of a, of b, of c.
    vectors = np.empty((3 * MOST_VECTORS, 3), np.int64)
    points = np.empty((3 * MOST_VECTORS, 3))
    count = np.zeros(3, np.int64)
    n = np.empty((1, 3))
    p = np.empty((1, 3))
    for n0 in range(-reach[0], reach[0] + 1):
        for n1 in range(-reach[1], reach[1] + 1):
            for n2 in range(-reach[2], reach[2] + 1):
                n[0, 0], n[0, 1], n[0, 2] = n0, n1, n2
                for k in range(3):
                    p[0, k] = through_float(n, 0, superbase, k)
                length = row_dot(p, 0, p, 0)
                if length > longest or (n0 == 0 and n1 == 0 and n2 == 0):
                    continue
                for row in range(3):
                    if abs(length - squares[row]) <= slack:
                        if count[row] == MOST_VECTORS:
                            return -1
                        c = row * MOST_VECTORS + count[row]
                        for k in range(3):
                            vectors[c, k] = int(np.rint(through(n, 0, s, k)))
                            points[c, k] = p[0, k]
                        count[row] += 1

    found = 0
    if next_step(six_numbers(cell, unit * unit), epsilon) == 0:
        set_unit(out[0])
        found = 1
    for i in range(count[0]):
        # M and -M have one metric and opposite determinants: half of the first rows suffice.
        if vectors[i, 0] < 0 or (
            vectors[i, 0] == 0 and (vectors[i, 1] < 0 or (vectors[i, 1] == 0 and vectors[i, 2] < 0))
        ):
            continue
        aa = row_dot(points, i, points, i)
        for j in range(MOST_VECTORS, MOST_VECTORS + count[1]):
            zeta = 2 * row_dot(points, i, points, j)
            if abs(zeta) > aa + epsilon:
                continue
            bb = row_dot(points, j, points, j)
            for h in range(2 * MOST_VECTORS, 2 * MOST_VECTORS + count[2]):
                d = triple_determinant(vectors, i, j, h)
                if d != 1 and d != -1:
                    continue
                cc = row_dot(points, h, points, h)
                xi, eta = 2 * row_dot(points, j, points, h), 2 * row_dot(points, i, points, h)
                if next_step((aa, bb, cc, xi, eta, zeta), epsilon) != 0:
                    continue
                if found == MOST_BASES:
                    return -1
                unit_matrix = True
                for k in range(3):
                    out[found, 0, k], out[found, 1, k], out[found, 2, k] = (
                        d * vectors[i, k],
                        d * vectors[j, k],
                        d * vectors[h, k],
                    )
                for r in range(3):
                    for k in range(3):
                        unit_matrix = unit_matrix and out[found, r, k] == (1 if r == k else 0)
                if not unit_matrix:
                    found += 1
    return found
