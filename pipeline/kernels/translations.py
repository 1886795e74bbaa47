"""The largest group of translations that a crystal has within a tolerance (compiled).

A group H of translations contains the lattice and finitely many more per cell. It is accepted when every site, carried
back by each translation from its image, lies within the tolerance of the mean over H. The largest accepted group wins;
ties go to the smaller residual, then to the smallest Hermite matrix.

Why the search is exact. If H is accepted, a site and its image under any t of H lie within `tolerance` of one mean, so
that they agree to 2 tolerance. Hence every t of H is the difference of two sites of the rarest species, up to
2 tolerance, and maps every site to a like site within 2 tolerance. Its order divides the number of sites of each
species, because translations move every site. The set C of translations with these properties therefore contains every
accepted group. If C with zero is a group and is accepted, nothing larger exists. Otherwise all subgroups inside C are
formed: the cyclic ones, then sums of those found with cyclic ones as long as they stay inside C. Every subgroup is a
sum of cyclic ones and each partial sum lies inside it, hence inside C, so that none is missed.

Preconditions: like sites are more than 4 tolerance apart (the image of a site is then unique); the cell is reduced, and
neighbouring fractions of the cell are more than 4 tolerance apart for the orders that occur, because a difference of
sites is snapped to the nearest fraction. Where fractions are denser than that (an order of some hundreds in a small
cell) a group may be missed, never wrongly accepted.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner, kernel
from .groups import group_form, mean_deviations, subgroups
from .integers import adjugate, copy_matrix, determinant, gcd, hermite_columns, multiply, set_unit
from .neighbours import fill_bins, site_near
from .niggli import reduce_cell
from .vectors import nearest_square, square, through, transform, wrapped

SAME_RESIDUAL = 1e-9
"""Residuals (angstrom) that differ by less count as equal when the best group is chosen."""


@inner
def common_divisor(kind: Ints) -> int:
    """Greatest common divisor of the numbers of sites of each kind; kind (n,) int64 ascending from 0."""
    g = 0
    run = 0
    for s in range(len(kind)):
        run += 1
        if s + 1 == len(kind) or kind[s + 1] != kind[s]:
            g = gcd(g, run)
            run = 0
    return g


@inner
def sort_steps(steps: Ints, images: Ints, found: int) -> None:
    """Sort steps[:found] ascending, by insertion, and carry the rows of images along."""
    for i in range(1, found):
        j = i
        while j > 0:
            difference = 0
            for k in range(3):
                difference = steps[j, k] - steps[j - 1, k]
                if difference != 0:
                    break
            if difference >= 0:
                break
            for k in range(3):
                kept = steps[j, k]
                steps[j, k] = steps[j - 1, k]
                steps[j - 1, k] = kept
            for s in range(images.shape[1]):
                kept = images[j, s]
                images[j, s] = images[j - 1, s]
                images[j - 1, s] = kept
            j -= 1


@inner
def shared_translations(cell: Floats, x: Floats, kind: Ints, tolerance: float, g: int) -> tuple[Ints, Ints, int]:
    """The set C: (steps, images, number): translations (>= number, 3) in units of 1/g of the cell, ascending, and the
    site that each site is moved to (>= number, n). g: common divisor of the numbers of sites; kind ascending, rarest
    first.
    """
    n = len(x)
    reach = 2.0 * tolerance
    rare = 1
    while rare < n and kind[rare] == 0:
        rare += 1
    steps = np.empty((rare, 3), np.int64)
    images = np.empty((1, n), np.int64)
    shape = np.empty(3, np.int64)
    width = np.empty(3)
    low = np.empty(3, np.int64)
    high = np.empty(3, np.int64)
    start = low
    order = low
    point = np.empty(3)
    t = np.empty(3, np.int64)
    found = 0
    binned = False
    for j in range(1, rare):
        for m in range(2, g + 1):
            if g % m != 0:
                continue
            common = m
            for k in range(3):
                d = x[j, k] - x[0, k]
                rounded = int(np.rint(d * m))
                point[k] = d - rounded / m
                t[k] = rounded % m
                common = gcd(common, t[k])
            # A fraction of smaller order was met at that order.
            if common != 1 or square(point[0], point[1], point[2], cell) > reach * reach:
                continue
            if not binned:
                start, order = fill_bins(cell, x, reach, shape, width)
                images = np.empty((rare, n), np.int64)
                binned = True
            whole = True
            for s in range(n):
                for k in range(3):
                    point[k] = wrapped(x[s, k] + t[k] / m)
                image = site_near(cell, x, kind, point, kind[s], reach, shape, width, start, order, low, high)
                if image < 0:
                    whole = False
                    break
                images[found, s] = image
            if not whole:
                continue
            for k in range(3):
                steps[found, k] = t[k] * (g // m)
            known = found == rare - 1
            for h in range(found):
                if steps[h, 0] == steps[found, 0] and steps[h, 1] == steps[found, 1] and steps[h, 2] == steps[found, 2]:
                    known = True
            if not known:
                found += 1
    # Ascending, so that what follows does not depend on the order of the sites.
    sort_steps(steps, images, found)
    return steps, images, found


@inner
def best_group(
    cell: Floats, x: Floats, steps: Ints, images: Ints, tolerance: float, g: int, means: Floats
) -> tuple[int, Ints, int]:
    """The largest accepted group inside zero and steps (c, 3): (index, member, row); index 1 where there is none.

    Its steps are those with member[row] != 0. Fills means (n, 3) for it.
    """
    size = len(steps)
    member = np.empty((1, size), np.int64)
    for c in range(size):
        member[0, c] = 1
    form = np.empty((3, 3), np.int64)
    best_form = np.empty((3, 3), np.int64)
    group_form(steps, member, 0, g, form)
    # The span of all steps has g^3 / det elements; the steps and zero are a group when the numbers agree.
    if (
        g * g * g // determinant(form) == size + 1
        and mean_deviations(cell, x, steps, images, member, 0, g, means) <= tolerance
    ):
        return size + 1, member, 0
    member, count = subgroups(steps, g)
    index, row, best_residual = 1, -1, 0.0
    for h in range(count):
        order = 1
        for c in range(size):
            order += member[h, c]
        if order < index:
            continue
        residual = mean_deviations(cell, x, steps, images, member, h, g, means)
        if residual > tolerance:
            continue
        group_form(steps, member, h, g, form)
        smaller = order > index or residual < best_residual - SAME_RESIDUAL
        if not smaller and residual <= best_residual + SAME_RESIDUAL:
            for p in range(9):
                difference = form[p // 3, p % 3] - best_form[p // 3, p % 3]
                if difference != 0:
                    smaller = difference < 0
                    break
        if smaller:
            index, row, best_residual = order, h, residual
            copy_matrix(form, best_form)
    if row >= 0:
        mean_deviations(cell, x, steps, images, member, row, g, means)
    return index, member, row


@inner
def divide_translations(
    cell: Floats, x: Floats, kind: Ints, size: int, tolerance: float, whole: Ints, site_map: Ints
) -> int:
    """Divide the largest group out of a crystal, once, in place; returns its index (1: none).

    cell (3, 3) Niggli-reduced; x (>= size, 3) in [0, 1); kind (>= size,) ascending; site_map (n,) from the sites of the
    start to the present ones. Afterwards cell is the old one times the inverse of an integer matrix H (not reduced),
    whole is whole H, and x, kind, site_map stand for the size / index new sites, in the order of their first sites.
    """
    g = common_divisor(kind[:size])
    if g == 1:
        return 1
    steps, images, found = shared_translations(cell, x[:size], kind[:size], tolerance, g)
    if found == 0:
        return 1
    means = np.empty((size, 3))
    index, member, row = best_group(cell, x[:size], steps[:found], images, tolerance, g, means)
    if index == 1:
        return 1
    # New cell = (form / g) old cell, so old cell = H new cell with H = g form^-1, an integer matrix of determinant
    # index.
    form = np.empty((3, 3), np.int64)
    h = np.empty((3, 3), np.int64)
    kept = np.empty((3, 3), np.int64)
    old = np.empty((3, 3))
    group_form(steps[:found], member, row, g, form)
    adjugate(form, h)
    d = determinant(form)
    for i in range(3):
        for j in range(3):
            h[i, j] = h[i, j] * g // d
            old[i, j] = cell[i, j]
            kept[i, j] = whole[i, j]
    multiply(kept, h, whole)
    transform(form, old, cell)
    for i in range(3):
        for j in range(3):
            cell[i, j] /= g
    # Sites.
    new_site = np.empty(size, np.int64)
    for s in range(size):
        new_site[s] = -1
    new = 0
    for s in range(size):
        if new_site[s] >= 0:
            continue
        new_site[s] = new
        for c in range(found):
            if member[row, c] != 0:
                new_site[images[c, s]] = new
        for k in range(3):
            means[s, k] += x[s, k]
        for k in range(3):
            x[new, k] = wrapped(through(means, s, h, k))  # Row `new` is not needed any more: new <= s.
        kind[new] = kind[s]
        new += 1
    for s in range(len(site_map)):
        site_map[s] = new_site[site_map[s]]
    return index


@kernel
def primitive_crystals(
    todo: Ints,
    cells: Floats,
    offsets: Ints,
    positions: Floats,
    kinds: Ints,
    tolerance: float,
    epsilon: float,
    index: Ints,
    matrices: Ints,
    residual: Floats,
    site_map: Ints,
) -> None:
    """The primitive crystals of a batch within a tolerance (angstrom), in place.

    The largest group is divided out and averaged over, and the new cell reduced, until nothing changes.
    todo (n,) int64: 1 for crystals to be worked on. cells (n, 3, 3), right-handed and Niggli-reduced, angstrom;
    offsets (n + 1,); positions (m, 3) fractional in [0, 1); kinds (m,) int64 ascending from 0 a crystal, the rarest
    first: cells, positions and kinds are overwritten by those of the primitive crystal (the first sites of each range).
    Filled for each crystal in todo: index (n,) int64, cells divided by (0 where a reduction failed);
    matrices K (n, 3, 3) int64: cell = K primitive_cell, det K = index, primitive_cell Niggli-reduced as reduce_cell
    does it; site_map (m,) int64: the new site, from 0 a crystal, of each site; residual (n,) angstrom: the largest
    distance of position K from new position[site_map] modulo the new lattice.
    """
    cell = np.empty((3, 3))
    new_cell = np.empty((3, 3))
    m = np.empty((3, 3), np.int64)
    inverse = np.empty((3, 3), np.int64)
    kept = np.empty((3, 3), np.int64)
    for i in range(len(todo)):
        if todo[i] == 0:
            continue
        a, b = offsets[i], offsets[i + 1]
        n = b - a
        whole = matrices[i]
        set_unit(whole)
        index[i] = 1
        residual[i] = 0.0
        for s in range(n):
            site_map[a + s] = s
        if common_divisor(kinds[a:b]) == 1:
            continue
        x = np.empty((n, 3))
        for s in range(n):
            for k in range(3):
                x[s, k] = positions[a + s, k]
        transform(whole, cells[i], cell)
        transform(whole, cell, new_cell)
        size = n
        while True:
            factor = divide_translations(new_cell, positions[a:b], kinds[a:b], size, tolerance, whole, site_map[a:b])
            if factor == 1:
                break
            size //= factor
            index[i] *= factor
            if reduce_cell(new_cell, epsilon, m) == 0.0:
                index[i] = 0
                break
            adjugate(m, inverse)
            copy_matrix(whole, kept)
            multiply(kept, inverse, whole)
            for s in range(a, a + size):
                p0, p1, p2 = positions[s, 0], positions[s, 1], positions[s, 2]
                for k in range(3):
                    positions[s, k] = wrapped(p0 * inverse[0, k] + p1 * inverse[1, k] + p2 * inverse[2, k])
            # From the start cell in one step, so that rounding does not add up.
            adjugate(whole, inverse)
            transform(inverse, cell, new_cell)
            for r in range(3):
                for k in range(3):
                    new_cell[r, k] /= index[i]
        if index[i] > 1:
            for r in range(3):
                for k in range(3):
                    cells[i, r, k] = new_cell[r, k]
            worst = 0.0
            for s in range(n):
                t = a + site_map[a + s]
                d0 = through(x, s, whole, 0) - positions[t, 0]
                d1 = through(x, s, whole, 1) - positions[t, 1]
                d2 = through(x, s, whole, 2) - positions[t, 2]
                worst = max(worst, nearest_square(d0, d1, d2, new_cell))
            residual[i] = np.sqrt(worst)


@kernel
def hermite_forms(matrices: Ints) -> None:
    """Bring each of (n, 3, 3) int64 matrices, none singular, to column Hermite form, in place."""
    for i in range(len(matrices)):
        hermite_columns(matrices[i], matrices[i])


def approximate_translations(
    cells: Floats, offsets: Ints, positions: Floats, kinds: Ints, tolerance: float, epsilon: float
) -> tuple[Ints, Ints, Floats]:
    """Approximate translations of a batch of canonical (Niggli-reduced) crystals; the arguments are left as they are.

    cells (n, 3, 3), offsets (n + 1,), positions (m, 3) fractional, kinds (m,) int64 ascending from 0 a crystal, the
    rarest first; tolerance in angstrom. Returns index (n,) int64 (1: none; 0: a reduction failed), H (n, 3, 3) int64
    and residual (n,) angstrom: cell = H pseudo_cell, H in column Hermite form, det H = index; residual is the largest
    distance of a site from its averaged one.
    """
    n = len(cells)
    index = np.ones(n, np.int64)
    matrices = np.empty((n, 3, 3), np.int64)
    residual = np.zeros(n)
    primitive_crystals(
        np.ones(n, np.int64), np.array(cells), np.array(offsets), positions - np.floor(positions), np.array(kinds),
        tolerance, epsilon, index, matrices, residual, np.empty(len(kinds), np.int64),
    )  # fmt: skip
    hermite_forms(matrices)
    return index, matrices, residual


def warm_up() -> None:
    """Compile the kernels that are called from Python."""
    approximate_translations(
        np.diag([3.0, 4.0, 10.0])[None], np.array([0, 2]), np.array([[0.0, 0.0, 0.0], [0.0, 0.0, 0.5]]),
        np.zeros(2, np.int64), 0.001, 1e-5,
    )  # fmt: skip
