"""Approximate translations of a crystal: all of them, one at a time, at a tolerance.

A translation t with m t a lattice vector (2 <= m <= 8) is listed when every site has a site of its species within the
tolerance of itself plus t. Nothing is missed: t takes the first site of the rarest species near another one, so t lies
within the tolerance of a difference of two such sites, and all vectors of order m in that ball are tried.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel
from .lattice_maps import inverse3

COMMON_ORDER = 840
"""Least common multiple of 1 to 8: translations are listed as integers over it."""


@inner
def _wider(integers: NDArray[np.int64], moved: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Copies with room for twice as many rows."""
    n = moved.shape[0]
    more_integers = np.empty((2 * n, 3), np.int64)
    more_moved = np.empty(2 * n)
    for i in range(n):
        more_moved[i] = moved[i]
        for k in range(3):
            more_integers[i, k] = integers[i, k]
    return more_integers, more_moved


@inner
def near_translations(
    cell: NDArray[np.float64],
    positions: NDArray[np.float64],
    blocks: NDArray[np.int64],
    planar: bool,
    tolerance: float,
) -> tuple[int, NDArray[np.int64], NDArray[np.float64]]:
    """Approximate translations of one crystal other than lattice vectors.

    cell (3, 3), rows; positions (n, 3), fractional, sorted by species; blocks (kinds + 1,): where each species begins.
    Returns how many there are, integers (t, 3) in [0, 840), translation = integers / 840 in fractions of the cell,
    distinct; and the displacement (t,), angstrom, of the site that moves farthest. Only orders that divide the number
    of sites of every species occur, because a translation group leaves no site in place.
    """
    common = 0
    rare = 0
    for s in range(blocks.shape[0] - 1):
        size = blocks[s + 1] - blocks[s]
        x, y = common, size
        while y:
            x, y = y, x % y
        common = x
        if size < blocks[rare + 1] - blocks[rare]:
            rare = s
    found = np.empty((64, 3), np.int64)
    moved = np.empty(64)
    count = 0
    if common == 1:
        return 0, found, moved
    g = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            g[i, j] = cell[i, 0] * cell[j, 0] + cell[i, 1] * cell[j, 1] + cell[i, 2] * cell[j, 2]
    inverse = inverse3(cell)
    reach = np.empty(3)
    for i in range(3):
        reach[i] = tolerance * math.sqrt(inverse[0, i] ** 2 + inverse[1, i] ** 2 + inverse[2, i] ** 2) + 1e-9
    tolerance2 = tolerance * tolerance * (1.0 + 1e-9)
    first = blocks[rare]
    low = np.empty(3, np.int64)
    high = np.empty(3, np.int64)
    for order in range(2, 9):
        if common % order:
            continue
        step = COMMON_ORDER // order
        for j in range(first + 1, blocks[rare + 1]):
            for i in range(3):
                d = positions[j, i] - positions[first, i]
                low[i] = math.ceil(order * (d - reach[i]))
                high[i] = math.floor(order * (d + reach[i]))
            if planar:
                low[2], high[2] = 0, 0
            for n0 in range(low[0], high[0] + 1):
                for n1 in range(low[1], high[1] + 1):
                    for n2 in range(low[2], high[2] + 1):
                        m0, m1, m2 = n0 % order * step, n1 % order * step, n2 % order * step
                        if m0 == 0 and m1 == 0 and m2 == 0:
                            continue
                        known = False
                        for k in range(count):
                            if found[k, 0] == m0 and found[k, 1] == m1 and found[k, 2] == m2:
                                known = True
                                break
                        if known:
                            continue
                        worst = 0.0
                        for s in range(blocks.shape[0] - 1):
                            for p in range(blocks[s], blocks[s + 1]):
                                best = np.inf
                                for q in range(blocks[s], blocks[s + 1]):
                                    x = positions[q, 0] - positions[p, 0] - n0 / order
                                    y = positions[q, 1] - positions[p, 1] - n1 / order
                                    z = positions[q, 2] - positions[p, 2] - n2 / order
                                    x -= math.floor(x + 0.5)
                                    y -= math.floor(y + 0.5)
                                    if not planar:
                                        z -= math.floor(z + 0.5)
                                    r = x * x * g[0, 0] + y * y * g[1, 1] + z * z * g[2, 2]
                                    r += 2.0 * (x * y * g[0, 1] + x * z * g[0, 2] + y * z * g[1, 2])
                                    if r < best:
                                        best = r
                                worst = max(worst, best)
                                if worst > tolerance2:
                                    break
                            if worst > tolerance2:
                                break
                        if worst <= tolerance2:
                            if count == moved.shape[0]:
                                found, moved = _wider(found, moved)
                            found[count, 0], found[count, 1], found[count, 2] = m0, m1, m2
                            moved[count] = math.sqrt(worst)
                            count += 1
    return count, found, moved


@kernel
def all_near_translations(
    cells: NDArray[np.float64],
    offsets: NDArray[np.int64],
    positions: NDArray[np.float64],
    blocks: NDArray[np.int64],
    planar: NDArray[np.bool_],
    tolerance: NDArray[np.float64],
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """`near_translations` of every crystal of a batch: (starts (n + 1,), integers (t, 3), displacement (t,)).

    blocks (n, kinds + 1): where each species begins, in sites of the batch; tolerance (n,), angstrom.
    """
    starts = np.zeros(cells.shape[0] + 1, np.int64)
    integers = np.empty((64, 3), np.int64)
    moved = np.empty(64)
    used = 0
    for c in range(cells.shape[0]):
        count, found, far = near_translations(cells[c], positions, blocks[c], planar[c], tolerance[c])
        while used + count > moved.shape[0]:
            integers, moved = _wider(integers, moved)
        starts[c + 1] = starts[c] + count
        for i in range(count):
            moved[used] = far[i]
            for k in range(3):
                integers[used, k] = found[i, k]
            used += 1
    return starts, integers[:used], moved[:used]


def warm_up() -> None:
    """Compile the kernel that is called from Python."""
    all_near_translations(
        np.eye(3)[None], np.array([0, 1]), np.zeros((1, 3)), np.array([[0, 1]]), np.zeros(1, np.bool_), np.zeros(1)
    )
