"""Small sums over three axes that the other kernels are written in (compiled)."""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner


@inner
def row_dot(v: Floats, i: int, w: Floats, j: int) -> float:
    """The scalar product of row i of v (n, 3) and row j of w (m, 3)."""
    return v[i, 0] * w[j, 0] + v[i, 1] * w[j, 1] + v[i, 2] * w[j, 2]  # type: ignore[no-any-return]


@inner
def through_float(x: Floats, s: int, m: Floats, k: int) -> float:
    """Component k of the row x[s] times m (3, 3) float64."""
    return x[s, 0] * m[0, k] + x[s, 1] * m[1, k] + x[s, 2] * m[2, k]  # type: ignore[no-any-return]


@inner
def through(x: Floats, s: int, m: Ints, k: int) -> float:
    """Component k of the row x[s] times m (3, 3) int64."""
    return x[s, 0] * m[0, k] + x[s, 1] * m[1, k] + x[s, 2] * m[2, k]  # type: ignore[no-any-return]


@inner
def square(d0: float, d1: float, d2: float, cell: Floats) -> float:
    """The squared length of the fractional vector (d0, d1, d2) in a cell (3, 3)."""
    total = 0.0
    for k in range(3):
        r = d0 * cell[0, k] + d1 * cell[1, k] + d2 * cell[2, k]
        total += r * r
    return total


@inner
def nearest_square(d0: float, d1: float, d2: float, cell: Floats) -> float:
    """The squared length after each of d0, d1, d2 is brought into [-1/2, 1/2]."""
    return square(d0 - np.rint(d0), d1 - np.rint(d1), d2 - np.rint(d2), cell)


@inner
def volume(cell: Floats) -> float:
    """The signed volume of a cell (3, 3), rows as vectors."""
    total = 0.0
    for i in range(3):
        j, k = (i + 1) % 3, (i + 2) % 3
        total += cell[0, i] * (cell[1, j] * cell[2, k] - cell[1, k] * cell[2, j])
    return total


@inner
def transform(m: Ints, cell: Floats, out: Floats) -> None:
    """out = m cell, for (3, 3) int64 and float64."""
    for i in range(3):
        for k in range(3):
            out[i, k] = m[i, 0] * cell[0, k] + m[i, 1] * cell[1, k] + m[i, 2] * cell[2, k]


@inner
def plane_spacing(cell: Floats, i: int) -> float:
    """Spacing (angstrom) of the lattice planes across axis i of a cell (3, 3): 1 / |a*|, 1 / |b*| or 1 / |c*|."""
    p, q = (i + 1) % 3, (i + 2) % 3
    area = 0.0
    for k in range(3):
        r, s = (k + 1) % 3, (k + 2) % 3
        n = cell[p, r] * cell[q, s] - cell[p, s] * cell[q, r]
        area += n * n
    return abs(volume(cell)) / np.sqrt(area)  # type: ignore[no-any-return]


@inner
def wrapped(x: float) -> float:
    """x modulo 1 in [0, 1), also for tiny negative x (where x - floor(x) rounds to 1)."""
    f = x - np.floor(x)
    return f if f < 1.0 else 0.0
