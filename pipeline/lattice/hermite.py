"""Hermite normal forms: one matrix for each sublattice and each superlattice.

Written with Python integers, for single matrices; kernels/integers.py has the compiled twin.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from ..model.batch import Ints


def hermite_rows(vectors: ArrayLike) -> Ints:
    """The row Hermite normal form (3, 3) int64 of the lattice that integer row vectors (k, 3) span.

    Upper triangular, positive diagonal, entries above each pivot between 0 and the pivot. Two sets of vectors span the
    same lattice if and only if their forms are equal. Raises ValueError where they span less than three dimensions.
    """
    rows = [[int(x) for x in row] for row in np.asarray(vectors)]
    form: list[list[int]] = []
    for column in range(3):
        while sum(1 for row in rows if row[column]) > 1:
            pivot = min((row for row in rows if row[column]), key=lambda row: abs(row[column]))
            for row in rows:
                if row is not pivot:
                    factor = row[column] // pivot[column]
                    for k in range(3):
                        row[k] -= factor * pivot[k]
        place = next((i for i, row in enumerate(rows) if row[column]), None)
        if place is None:
            raise ValueError("the vectors do not span three dimensions")
        found = rows.pop(place)
        form.append([-x for x in found] if found[column] < 0 else found)
    for pivot_row in (1, 2):
        for row in form[:pivot_row]:
            factor = row[pivot_row] // form[pivot_row][pivot_row]
            for k in range(3):
                row[k] -= factor * form[pivot_row][k]
    return np.array(form, dtype=np.int64)


def hermite_columns(matrix: ArrayLike) -> Ints:
    """The column Hermite normal form (3, 3) int64 of an integer matrix (3, 3): the same for M and M U, U unimodular.

    Lower triangular, positive diagonal, entries left of each pivot between 0 and the pivot. With cell = H part, it
    names the lattice of `part` whatever basis of it was taken.
    """
    return np.ascontiguousarray(hermite_rows(np.asarray(matrix).T).T)
