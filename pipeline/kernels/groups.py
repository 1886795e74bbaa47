"""Groups of translations: those inside a set, and how well one is obeyed (compiled).

A translation t is three integers in units of 1/g of the cell axes, modulo g; the trivial one is left out of lists.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner
from .integers import hermite_insert
from .vectors import square


@inner
def group_form(steps: Ints, member: Ints, row: int, g: int, form: Ints) -> None:
    """Fill form (3, 3): the row Hermite form, in units of 1/g, of the lattice of the cell and steps[member[row] !=
    0].
    """
    for i in range(3):
        for j in range(3):
            form[i, j] = g if i == j else 0
    v = np.empty(3, np.int64)
    for c in range(len(steps)):
        if member[row, c] != 0:
            for k in range(3):
                v[k] = steps[c, k]
            hermite_insert(form, v)


@inner
def mean_deviations(
    cell: Floats, x: Floats, steps: Ints, images: Ints, member: Ints, row: int, g: int, means: Floats
) -> float:
    """The largest distance (angstrom) of a site from the mean over the group of zero and steps[member[row] != 0].

    cell (3, 3), x (n, 3) fractional, steps (c, 3), images (c, n): the site that each site is moved to. Fills means (n,
    3): the fractional displacement from each site to the mean of its images, each carried back by its translation.
    """
    worst = 0.0
    for s in range(len(x)):
        size = 1
        for k in range(3):
            means[s, k] = 0.0
        for c in range(len(steps)):
            if member[row, c] != 0:
                size += 1
                for k in range(3):
                    d = x[images[c, s], k] - steps[c, k] / g - x[s, k]
                    means[s, k] += d - np.rint(d)
        for k in range(3):
            means[s, k] /= size
        worst = max(worst, square(means[s, 0], means[s, 1], means[s, 2], cell))
    return np.sqrt(worst)  # type: ignore[no-any-return]


@inner
def position_of(steps: Ints, g: int, t0: int, t1: int, t2: int) -> int:
    """Where a translation stands in ascending steps (c, 3); -1 where it does not."""
    wanted = (t0 % g * g + t1 % g) * g + t2 % g
    low, high = 0, len(steps)
    while low < high:
        middle = (low + high) // 2
        if (steps[middle, 0] * g + steps[middle, 1]) * g + steps[middle, 2] < wanted:
            low = middle + 1
        else:
            high = middle
    if low < len(steps) and (steps[low, 0] * g + steps[low, 1]) * g + steps[low, 2] == wanted:
        return low
    return -1


@inner
def known_before(member: Ints, row: int) -> bool:
    """Whether member[row] equals an earlier row."""
    for h in range(row):
        equal = True
        for c in range(member.shape[1]):
            if member[h, c] != member[row, c]:
                equal = False
                break
        if equal:
            return True
    return False


@inner
def subgroups(steps: Ints, g: int) -> tuple[Ints, int]:
    """All groups of zero and some of the steps, but for {0}: (member, number), member (>= number, c) int64 of 0 and 1.

    steps (c, 3) ascending. First the cyclic groups, then sums of a group found and a cyclic one that stay inside the
    steps. Each group is a sum of cyclic ones with all partial sums inside it, so that none is missed.
    """
    size = len(steps)
    member = np.zeros((16, size), np.int64)
    generators = np.empty(size, np.int64)
    cyclic, found = 0, 0
    # Round -1 adds each step's own multiples to {0}; round h adds them to group h.
    h = -1
    while h < found:
        for z in range(size if h < 0 else cyclic):
            c = z if h < 0 else generators[z]
            if h >= 0 and member[h, c] == 1:
                continue
            if found == len(member):
                larger = np.zeros((2 * found, size), np.int64)
                for r in range(found):
                    for e in range(size):
                        larger[r, e] = member[r, e]
                member = larger
            for e in range(size):
                member[found, e] = member[h, e] if h >= 0 else 0
            inside = True
            multiple = 1
            while inside and (
                multiple * steps[c, 0] % g != 0 or multiple * steps[c, 1] % g != 0 or multiple * steps[c, 2] % g != 0
            ):
                for e in range(-1, size if h >= 0 else 0):
                    t0, t1, t2 = multiple * steps[c, 0], multiple * steps[c, 1], multiple * steps[c, 2]
                    if e >= 0:
                        if member[h, e] == 0:
                            continue
                        t0 += steps[e, 0]
                        t1 += steps[e, 1]
                        t2 += steps[e, 2]
                    if t0 % g == 0 and t1 % g == 0 and t2 % g == 0:
                        continue
                    p = position_of(steps, g, t0, t1, t2)
                    if p < 0:
                        inside = False
                        break
                    member[found, p] = 1
                multiple += 1
            if inside and not known_before(member, found):
                if h < 0:
                    generators[found] = c
                found += 1
        if h < 0:
            cyclic = found
        h += 1
    return member, found
