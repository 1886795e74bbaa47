"""Hermite normal form of 3x3 integer matrices and the cosets of the sublattice they span.

Rows are vectors. The form is H = U M with U unimodular, H = [[a, p, q], [0, b, r], [0, 0, c]], a, b, c > 0,
0 <= p < b, 0 <= q, r < c. The integer vectors of the box 0 <= n0 < a, 0 <= n1 < b, 0 <= n2 < c are one representative a
coset of Z^3 / Z^3 M each; coset j has n0 = j // (b c), n1 = j // c mod b, n2 = j mod c.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .compiled import inner

Ints = NDArray[np.int64]


@inner
def hermite(matrix: Ints) -> Ints:
    """The row Hermite normal form (3, 3) int64 of a regular integer matrix."""
    h = matrix.copy()
    for i in range(3):
        while True:  # Euclid on column i below row i
            pivot = -1
            for r in range(i, 3):
                if h[r, i] != 0 and (pivot < 0 or abs(h[r, i]) < abs(h[pivot, i])):
                    pivot = r
            if pivot != i:
                for k in range(3):
                    h[i, k], h[pivot, k] = h[pivot, k], h[i, k]
            done = True
            for r in range(i + 1, 3):
                if h[r, i] != 0:
                    n = h[r, i] // h[i, i]
                    for k in range(3):
                        h[r, k] -= n * h[i, k]
                    done = done and h[r, i] == 0
            if done:
                break
        if h[i, i] < 0:
            for k in range(3):
                h[i, k] = -h[i, k]
        for r in range(i):
            n = h[r, i] // h[i, i]
            for k in range(3):
                h[r, k] -= n * h[i, k]
    return h


@inner
def coset_index(h: Ints, n0: int, n1: int, n2: int) -> int:
    """Which coset of the sublattice spanned by the Hermite matrix `h` the integer vector (n0, n1, n2) lies in."""
    k = n0 // h[0, 0]
    n0, n1, n2 = n0 - k * h[0, 0], n1 - k * h[0, 1], n2 - k * h[0, 2]
    k = n1 // h[1, 1]
    n1, n2 = n1 - k * h[1, 1], n2 - k * h[1, 2]
    n2 -= (n2 // h[2, 2]) * h[2, 2]
    return int((n0 * h[1, 1] + n1) * h[2, 2] + n2)


@inner
def multiples_in(matrix: Ints, modulus: int) -> tuple[bool, Ints]:
    """The Hermite matrix of {n in Z^3 : n @ matrix = 0 mod modulus}, if its determinant is |modulus|.

    Such a matrix is unique; all Hermite matrices of that determinant are tried (155 for 8). False where the sublattice
    has another index.
    """
    index = abs(modulus)
    h = np.zeros((3, 3), np.int64)
    for a in range(1, index + 1):
        if index % a:
            continue
        for b in range(1, index // a + 1):
            if (index // a) % b:
                continue
            c = index // (a * b)
            for p in range(b):
                for q in range(c):
                    for r in range(c):
                        h[0, 0], h[0, 1], h[0, 2] = a, p, q
                        h[1, 0], h[1, 1], h[1, 2] = 0, b, r
                        h[2, 0], h[2, 1], h[2, 2] = 0, 0, c
                        fits = True
                        for i in range(3):
                            for j in range(3):
                                v = h[i, 0] * matrix[0, j] + h[i, 1] * matrix[1, j] + h[i, 2] * matrix[2, j]
                                if v % index != 0:
                                    fits = False
                                    break
                            if not fits:
                                break
                        if fits:
                            return True, h
    return False, h
