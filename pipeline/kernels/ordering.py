"""The smallest description of a crystal among bases and origins (compiled).

Positions are compared as integers n = floor(x N + phi) modulo N, so that rounding decides nothing: with N prime and phi
as they are, no common fraction falls on a grid line. A site is one int64: the rank of its species, then three times 17
bits. The description of a crystal under a basis and an origin is the ascending list of its sites; the lexicographically
smallest list wins, and the first of equal ones.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from ..tolerances import GRID, GRID_OFFSET
from .compiled import inner
from .vectors import through

LARGEST = 2**62
"""Above every packed site."""

MOST_KINDS = 2048
"""Species that fit beside three times 17 bits into 62."""


@inner
def grid_number(x: float) -> int:
    """floor(x N + phi) modulo N of a fractional coordinate."""
    return int(np.floor(x * GRID + GRID_OFFSET)) % GRID


@inner
def pack(kind: int, y: Floats, site: int, origin: int) -> int:
    """Row `site` of y (n, 3) seen from row `origin`, as an integer that sorts by species, then position."""
    key = kind
    for k in range(3):
        key = key << 17 | grid_number(y[site, k] - y[origin, k])
    return key


@inner
def sort_with(keys: Ints, order: Ints) -> None:
    """Sort keys (n,) ascending in place and carry order (n,) along (Shell 1959, gaps of Ciura 2001)."""
    for gap in (701, 301, 132, 57, 23, 10, 4, 1):
        for i in range(gap, len(keys)):
            key, other = keys[i], order[i]
            j = i
            while j >= gap and keys[j - gap] > key:
                keys[j], order[j] = keys[j - gap], order[j - gap]
                j -= gap
            keys[j], order[j] = key, other


@inner
def mixed(key: int) -> int:
    """A 64-bit mix of an integer (multiply and shift); sums of it tell multisets of sites apart."""
    z = key * -7046029254386353131
    z = (z ^ (z >> 32)) * -2960836687088648813
    return z ^ (z >> 29)


@inner
def change_basis(x: Floats, inverses: Ints, b: int, n: int, y: Floats) -> None:
    """y[:n] = x[:n] inverses[b], for x and y (>= n, 3) float64 and inverses (count, 3, 3) int64."""
    for s in range(n):
        for k in range(3):
            y[s, k] = through(x, s, inverses[b], k)


@inner
def smallest_description(x: Floats, kind: Ints, inverses: Ints, count: int, order: Ints) -> tuple[int, int]:
    """The basis and the origin site of the smallest description: (number of the basis, number of the site).

    x (n, 3) fractional; kind (n,) int64 ascending from 0, the origin lies on a site of kind 0; inverses (>= count, 3,
    3) int64: inverse matrices of the bases, positions in a basis are x inverse. Fills order (n,): sites in ascending
    order.

    No full list is formed where it can be avoided. The smallest entry of every list is the origin itself. So the second
    is compared first: that alone leaves hardly more than the descriptions equal by symmetry. Among those left, a list
    that has the same sum of mixed entries as the best one is that list again (up to chance of 2^-64) and is passed
    over.
    """
    n = len(x)
    rare = 1
    while rare < n and kind[rare] == 0:
        rare += 1
    y = np.empty((n, 3))
    second = np.zeros((count, rare), np.int64)
    smallest = np.int64(0)
    if rare > 1:
        smallest = np.int64(LARGEST)
        for b in range(count):
            change_basis(x, inverses, b, rare, y)
            for o in range(rare):
                least = np.int64(LARGEST)
                for s in range(rare):
                    # The first coordinate decides for nearly all.
                    if s != o and grid_number(y[s, 0] - y[o, 0]) <= least >> 34:
                        least = min(least, np.int64(pack(0, y, s, o)))
                second[b, o] = least
                smallest = min(smallest, least)

    best_basis, best_origin = -1, -1
    best = np.empty(n, np.int64)
    keys = np.empty(n, np.int64)
    sites = np.empty(n, np.int64)
    best_sum = np.int64(0)
    for b in range(count):
        ready = False
        for o in range(rare):
            if second[b, o] != smallest:
                continue
            if not ready:
                change_basis(x, inverses, b, n, y)
                ready = True
            total = np.int64(0)
            for s in range(n):
                keys[s] = pack(kind[s], y, s, o)
                sites[s] = s
                total += mixed(keys[s])
            if best_basis >= 0 and total == best_sum:
                continue
            sort_with(keys, sites)
            smaller = best_basis < 0
            if not smaller:
                for s in range(n):
                    if keys[s] != best[s]:
                        smaller = keys[s] < best[s]
                        break
            if smaller:
                best_basis, best_origin, best_sum = b, o, total
                for s in range(n):
                    best[s] = keys[s]
                    order[s] = sites[s]
    return best_basis, best_origin
