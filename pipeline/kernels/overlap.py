"""The closest two sites under periodic boundaries, where they are closer than a limit (compiled).

Exact on any cell: a vector shorter than the limit has fractional coordinates of at most limit / h_i, with h_i the
spacing of the lattice planes across axis i, so that all images that can count are visited. On a reduced cell this is
one image for almost every pair.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats
from .compiled import inner
from .vectors import plane_spacing, square


@inner
def closest_overlap(cell: Floats, x: Floats, limit: float) -> tuple[int, int, float]:
    """The closest pair of sites under `limit` angstrom as (i, j, distance), i <= j; (-1, -1, limit) where there is
    none.

    cell (3, 3), x (n, 3) fractional. i == j means a site and its own image: the shortest lattice vector is too short.
    Precondition for speed, not for the result: a reduced cell.
    """
    n = len(x)
    w = np.empty(3)
    low = np.empty(3, np.int64)
    high = np.empty(3, np.int64)
    for k in range(3):
        w[k] = limit / plane_spacing(cell, k)
    best = limit * limit
    first, second = -1, -1
    for i in range(n):
        for j in range(i, n):
            if i == j and i > 0:
                continue  # All sites have the same images of their own.
            possible = True
            for k in range(3):
                d = x[j, k] - x[i, k]
                low[k] = int(np.ceil(-w[k] - d))
                high[k] = int(np.floor(w[k] - d))
                if low[k] > high[k]:
                    possible = False
                    break
            if not possible:
                continue
            for s0 in range(low[0], high[0] + 1):
                for s1 in range(low[1], high[1] + 1):
                    for s2 in range(low[2], high[2] + 1):
                        if i == j and s0 == 0 and s1 == 0 and s2 == 0:
                            continue
                        r = square(x[j, 0] - x[i, 0] + s0, x[j, 1] - x[i, 1] + s1, x[j, 2] - x[i, 2] + s2, cell)
                        if r < best:
                            best = r
                            first, second = i, j
    return first, second, np.sqrt(best)
