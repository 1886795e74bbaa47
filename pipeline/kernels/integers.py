"""Integer matrices of three rows: product, determinant, adjugate, Hermite form (compiled)."""

from __future__ import annotations

import numpy as np

from ..model.batch import Ints
from .compiled import inner


@inner
def gcd(a: int, b: int) -> int:
    """Greatest common divisor of two numbers that are not negative."""
    while b != 0:
        a, b = b, a % b
    return a


@inner
def set_unit(m: Ints) -> None:
    """Make m (3, 3) the unit matrix."""
    for i in range(3):
        for j in range(3):
            m[i, j] = 1 if i == j else 0


@inner
def copy_matrix(source: Ints, out: Ints) -> None:
    """out = source, both (3, 3) int64."""
    for i in range(3):
        for j in range(3):
            out[i, j] = source[i, j]


@inner
def multiply(a: Ints, b: Ints, out: Ints) -> None:
    """out = a b of (3, 3) int64 matrices; out may not be a or b."""
    for i in range(3):
        for j in range(3):
            out[i, j] = a[i, 0] * b[0, j] + a[i, 1] * b[1, j] + a[i, 2] * b[2, j]


@inner
def determinant(m: Ints) -> int:
    """The determinant of a (3, 3) int64 matrix."""
    total = 0
    for i in range(3):
        j, k = (i + 1) % 3, (i + 2) % 3
        total += m[0, i] * (m[1, j] * m[2, k] - m[1, k] * m[2, j])
    return total


@inner
def adjugate(m: Ints, out: Ints) -> None:
    """out (3, 3) int64 with m out = det(m): the inverse where det(m) = 1. out may not be m."""
    for i in range(3):
        for j in range(3):
            r1, r2 = (j + 1) % 3, (j + 2) % 3
            c1, c2 = (i + 1) % 3, (i + 2) % 3
            out[i, j] = m[r1, c1] * m[r2, c2] - m[r1, c2] * m[r2, c1]


@inner
def hermite_insert(form: Ints, v: Ints) -> None:
    """Add the vector v (3,) to the lattice whose row Hermite form is `form` (3, 3), in place; v is used up.

    Precondition: `form` is upper triangular with positive diagonal, so the lattice has three dimensions already.
    """
    for i in range(3):
        while v[i] != 0:  # Euclid on the pivot column; both rows keep spanning the same lattice.
            q = form[i, i] // v[i]
            for k in range(3):
                rest = form[i, k] - q * v[k]
                form[i, k] = v[k]
                v[k] = rest
        if form[i, i] < 0:
            for k in range(3):
                form[i, k] = -form[i, k]
    for pivot in range(1, 3):
        for i in range(pivot):
            q = form[i, pivot] // form[pivot, pivot]
            for k in range(3):
                form[i, k] -= q * form[pivot, k]


@inner
def hermite_columns(m: Ints, out: Ints) -> None:
    """The column Hermite form (lower triangular) of a (3, 3) int64 matrix that is not singular; out may be m."""
    d = abs(determinant(m))
    form = np.empty((3, 3), np.int64)
    v = np.empty(3, np.int64)
    set_unit(form)
    for i in range(3):
        form[i, i] = d  # d times the unit lattice lies in the lattice of the columns.
    for j in range(3):
        for k in range(3):
            v[k] = m[k, j]
        hermite_insert(form, v)
    for i in range(3):
        for j in range(3):
            out[i, j] = form[j, i]
