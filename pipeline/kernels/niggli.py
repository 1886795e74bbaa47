"""Niggli reduction of one cell, with its change of basis (compiled).

Krivy & Gruber, Acta Cryst. A32 (1976) 297-298, with the tolerance of Grosse-Kunstleve, Sauter & Adams, Acta Cryst. A60
(2004) 1-6, applied at cell volume 1. Three measures keep the outcome from depending on rounding:
- The integer matrix is what is carried on; the metric is computed from it and the start cell at every step, so that
  no error builds up.
- Signs are decided by counting those beyond the tolerance, never by the sign of a product of small numbers.
- A strongly skewed cell is first shortened pair by pair with rounded quotients (Lagrange), because the steps of Krivy
  & Gruber subtract one vector at a time.

With a tolerance, equality is not transitive: of a lattice that misses a higher symmetry by about the tolerance it can
happen that no basis at all satisfies the conditions, or that the steps go round in a circle. Then a tolerance smaller
by LEVEL_STEP is taken, and so on; at some level the near-equalities count as inequalities, and a Niggli cell exists
for each lattice without tolerance.

A cell that is reduced already (within one of these tolerances) is left exactly as it is.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner, kernel
from .integers import set_unit
from .vectors import row_dot, transform, volume

MAX_STEPS = 200
"""Steps after which a reduction counts as failed. From a pairwise shortened cell it takes about ten."""

LEVEL_STEP = 0.1
LEVELS = 6
"""Tolerances tried: epsilon, and epsilon times powers of LEVEL_STEP."""

Six = tuple[float, float, float, float, float, float]


@inner
def six_numbers(v: Floats, scale: float) -> Six:
    """A, B, C, xi, eta, zeta of the vectors v (3, 3), times `scale`."""
    return (
        scale * row_dot(v, 0, v, 0),
        scale * row_dot(v, 1, v, 1),
        scale * row_dot(v, 2, v, 2),
        scale * 2 * row_dot(v, 1, v, 2),
        scale * 2 * row_dot(v, 0, v, 2),
        scale * 2 * row_dot(v, 0, v, 1),
    )


@inner
def next_step(six: Six, e: float) -> int:
    """The number (1 to 8) of the first step of Krivy & Gruber that changes the cell; 0 where it is reduced."""
    a, b, c, xi, eta, zeta = six
    if a > b + e or (abs(a - b) <= e and abs(xi) > abs(eta) + e):
        return 1
    if b > c + e or (abs(b - c) <= e and abs(eta) > abs(zeta) + e):
        return 2
    positive = int(xi > e) + int(eta > e) + int(zeta > e)
    negative = int(xi < -e) + int(eta < -e) + int(zeta < -e)
    if positive + negative == 3 and negative % 2 == 0:
        if negative > 0:
            return 3
    elif positive > 0:
        return 4
    if abs(xi) > b + e or (abs(xi - b) <= e and 2 * eta < zeta - e) or (abs(xi + b) <= e and zeta < -e):
        return 5
    if abs(eta) > a + e or (abs(eta - a) <= e and 2 * xi < zeta - e) or (abs(eta + a) <= e and zeta < -e):
        return 6
    if abs(zeta) > a + e or (abs(zeta - a) <= e and 2 * xi < eta - e) or (abs(zeta + a) <= e and eta < -e):
        return 7
    total = xi + eta + zeta + a + b
    if total < -e or (abs(total) <= e and 2 * (a + eta) + zeta > e):
        return 8
    return 0


@inner
def exchange(m: Ints, i: int, j: int) -> None:
    """Exchange rows i and j of m (3, 3) and negate all three, which keeps the determinant."""
    for k in range(3):
        kept = m[i, k]
        m[i, k] = m[j, k]
        m[j, k] = kept
        for r in range(3):
            m[r, k] = -m[r, k]


@inner
def add_row(m: Ints, i: int, factor: int, j: int) -> None:
    """Add `factor` times row j of m (3, 3) to row i."""
    for k in range(3):
        m[i, k] += factor * m[j, k]


@inner
def shorten_pairs(cell: Floats, m: Ints) -> None:
    """Subtract rounded multiples of shorter vectors from longer ones until no vector shortens; m changes in place."""
    v = np.empty((3, 3))
    for _ in range(MAX_STEPS):
        transform(m, cell, v)
        changed = False
        for i in range(3):
            for j in range(3):
                if i == j:
                    continue
                square = row_dot(v, j, v, j)
                dot = row_dot(v, i, v, j)
                # The margin keeps a quotient of one half from swinging to and fro.
                if square > 0 and abs(dot) > 0.5000001 * square:
                    q = int(np.rint(dot / square))
                    add_row(m, i, -q, j)
                    transform(m, cell, v)
                    changed = True
        if not changed:
            return


@inner
def apply_step(step: int, six: Six, e: float, m: Ints) -> None:
    """Apply a step of Krivy & Gruber to the integer matrix m (3, 3), in place. Every step has determinant +1."""
    xi, eta, zeta = six[3], six[4], six[5]
    if step == 1:
        exchange(m, 0, 1)
    elif step == 2:
        exchange(m, 1, 2)
    elif step == 3 or step == 4:
        if step == 3:  # Two are negative: make all positive.
            i = -1 if xi < -e else 1
            j = -1 if eta < -e else 1
            h = i * j
        else:  # Make all negative or zero; the sign left over goes to one that is zero.
            i = -1 if xi > e else 1
            j = -1 if eta > e else 1
            h = -1 if zeta > e else 1
            if i * j * h < 0:
                if abs(zeta) <= e:
                    h = -h
                elif abs(eta) <= e:
                    j = -j
                else:
                    i = -i
        for k in range(3):
            m[0, k] *= i
            m[1, k] *= j
            m[2, k] *= h
    elif step == 5:
        add_row(m, 2, -1 if xi > 0 else 1, 1)
    elif step == 6:
        add_row(m, 2, -1 if eta > 0 else 1, 0)
    elif step == 7:
        add_row(m, 1, -1 if zeta > 0 else 1, 0)
    else:
        add_row(m, 2, 1, 0)
        add_row(m, 2, 1, 1)


@inner
def krivy_gruber(cell: Floats, epsilon: float, m: Ints) -> bool:
    """Apply steps until none is due: m (3, 3) int64 changes in place; the reduced cell is m cell.

    Returns False where the steps do not come to an end.
    """
    v = np.empty((3, 3))
    scale = abs(volume(cell)) ** (-2.0 / 3.0)
    for _ in range(MAX_STEPS):
        transform(m, cell, v)
        six = six_numbers(v, scale)
        step = next_step(six, epsilon)
        if step == 0:
            return True
        apply_step(step, six, epsilon, m)
    return False


@inner
def reduce_cell(cell: Floats, epsilon: float, m: Ints) -> float:
    """Niggli reduction of a right-handed cell (3, 3): fills m (3, 3) int64, det +1, with reduced cell = m cell.

    epsilon is dimensionless, for cell volume 1. Returns the tolerance at which m cell is reduced: epsilon, or a smaller
    one where the steps go round in a circle at epsilon (see the head of this file), or 0 where no tolerance will do. A
    cell that is reduced at one of these tolerances is left as it is.
    """
    set_unit(m)
    six = six_numbers(cell, abs(volume(cell)) ** (-2.0 / 3.0))
    level = epsilon
    for _ in range(LEVELS):
        if next_step(six, level) == 0:
            return level
        level *= LEVEL_STEP
    shorten_pairs(cell, m)
    level = epsilon
    for _ in range(LEVELS):
        if krivy_gruber(cell, level, m):
            return level
        level *= LEVEL_STEP
    return 0.0


@kernel
def reduce_cells(cells: Floats, epsilon: float) -> tuple[Ints, Floats]:
    """Matrices (n, 3, 3) int64 and tolerances (n,) float64, as reduce_cell gives them, of right-handed cells (n, 3,
    3).
    """
    n = len(cells)
    matrices = np.empty((n, 3, 3), np.int64)
    levels = np.empty(n)
    for i in range(n):
        levels[i] = reduce_cell(cells[i], epsilon, matrices[i])
    return matrices, levels
