"""How many symmetry operations a crystal has within given distances: what tells whether its space group is certain.

An operation x -> W x + w is measured by what it asks of the lattice and of the sites:

    lattice     for the basis vectors a_i and their images: the largest change of a length, and of an angle times the
                mean of the two lengths that enclose it (Togo, Shinohara & Tanaka, arXiv:1808.01590, eq. 7)
    sites       the largest distance of an image from the nearest site of its species after the mean shift is taken out

The residual is the larger of the two, in angstrom; for one W and each pairing of sites the best w is taken. Counting is
nested: a larger limit never counts fewer.

Candidates. A rotation of finite order that nearly maps the lattice to itself is a two-fold one or the product of two
two-fold ones (every 3-, 4- and 6-fold axis of a lattice has two-fold axes at right angles to it), with their inverses
by the inversion; all with strain up to `reach` come from automorphisms.py. w is tried for every site onto which a
chosen site of the rarest species can fall: within a residual r all other sites then lie within 2 r of their partners,
so that the search at 2 r misses nothing, and the partner is the nearest site as long as 4 r is below the least
distance of two sites of a species.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Codes, Floats, Ints
from .automorphisms import MAX_AXES, two_fold_axes
from .compiled import inner, kernel
from .lattice_type import invert, metric_of

MAX_ROTATIONS = 96
"""Rows for candidate rotations; a cubic lattice has 24."""


@inner
def _add_rotation(m: Ints, rotations: Ints, n: int) -> int:
    """Append the (3, 3) integer matrix if it is not there yet and there is room; the new number of rotations."""
    for i in range(n):
        same = True
        for p in range(3):
            for q in range(3):
                same = same and rotations[i, p, q] == m[p, q]
        if same:
            return n
    if n < rotations.shape[0]:
        for p in range(3):
            for q in range(3):
                rotations[n, p, q] = m[p, q]
        return n + 1
    return n


@inner
def _lattice_residual(m: Ints, metric: Floats) -> float:
    """The lattice part of the residual, angstrom, of the basis change m (rows: images of the basis vectors)."""
    image = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            s = 0.0
            for p in range(3):
                for q in range(3):
                    s += m[i, p] * metric[p, q] * m[j, q]
            image[i, j] = s
    largest = 0.0
    for i in range(3):
        old, new = np.sqrt(metric[i, i]), np.sqrt(image[i, i])
        largest = max(largest, abs(new - old))
        for j in range(i):
            lengths = np.sqrt(metric[j, j]) * old
            images = np.sqrt(image[j, j]) * new
            c = min(1.0, max(-1.0, metric[i, j] / lengths))
            d = min(1.0, max(-1.0, image[i, j] / images))
            # sin of the difference of the angles, times the mean length.
            sine = abs(np.sqrt(1 - c * c) * d - c * np.sqrt(1 - d * d))
            largest = max(largest, sine * np.sqrt(0.5 * (lengths + images)))
    return float(largest)


@inner
def _site_residual(
    rotated: Floats, site: int, positions: Floats, species: Codes, base: int, target: int, cell: Floats, limit: float
) -> tuple[float, float]:
    """Site part of the residual and its root mean square, angstrom, for rotated positions (n, 3) moved so that `site`
    falls on `target`.

    Infinite where a site is farther than 2 `limit` from every site of its species.
    """
    n = len(rotated)
    w0 = positions[target, 0] - rotated[site, 0]
    w1 = positions[target, 1] - rotated[site, 1]
    w2 = positions[target, 2] - rotated[site, 2]
    cut = 4.0 * limit * limit
    shifts = np.empty((n, 3))
    mx, my, mz = 0.0, 0.0, 0.0
    for i in range(n):
        x, y, z = rotated[i, 0] + w0, rotated[i, 1] + w1, rotated[i, 2] + w2
        best = np.inf
        for j in range(n):
            if species[base + j] != species[base + i]:
                continue
            p, q, r = positions[j, 0] - x, positions[j, 1] - y, positions[j, 2] - z
            p -= np.floor(p + 0.5)
            q -= np.floor(q + 0.5)
            r -= np.floor(r + 0.5)
            dx = p * cell[0, 0] + q * cell[1, 0] + r * cell[2, 0]
            dy = p * cell[0, 1] + q * cell[1, 1] + r * cell[2, 1]
            dz = p * cell[0, 2] + q * cell[1, 2] + r * cell[2, 2]
            d = dx * dx + dy * dy + dz * dz
            if d < best:
                best = d
                shifts[i, 0], shifts[i, 1], shifts[i, 2] = dx, dy, dz
                if d <= cut:
                    break
        if best > cut:
            return np.inf, np.inf
        mx += shifts[i, 0]
        my += shifts[i, 1]
        mz += shifts[i, 2]
    mx, my, mz = mx / n, my / n, mz / n
    largest, total = 0.0, 0.0
    for i in range(n):
        dx, dy, dz = shifts[i, 0] - mx, shifts[i, 1] - my, shifts[i, 2] - mz
        square = dx * dx + dy * dy + dz * dz
        largest = max(largest, square)
        total += square
    return np.sqrt(largest), np.sqrt(total / n)


@kernel
def count_operations(
    cells: Floats, offsets: Ints, positions: Floats, species: Codes, limits: Floats, counts: Ints, possible: Ints
) -> None:
    """For each crystal and limit the number of operations (modulo lattice translations) with a residual up to it.

    cells (n, 3, 3), rows are vectors, reduced; offsets (n + 1,); positions (m, 3) fractional; species (m,) int32;
    limits (k,) ascending, angstrom; fills counts (n, k) int64, at least 1: the identity. possible (n,) int64 is filled
    with the number of operations that some shift of origin could bring every site within half the largest limit of its
    partner. Precondition: four times the largest limit is below the least distance of two sites of a species, or
    partners can be confused.

    `possible` never counts too few: for displacements d_i of at most r the residual is at most 2 r, and of all shifts
    the mean leaves the least root mean square, which is at most r.
    """
    axes = np.empty((MAX_AXES, 7), np.int64)
    strains = np.empty(MAX_AXES)
    metric = np.empty((3, 3))
    inverse = np.empty((3, 3))
    rotations = np.empty((MAX_ROTATIONS, 3, 3), np.int64)
    twofold = np.empty((MAX_AXES, 3, 3), np.int64)
    m = np.empty((3, 3), np.int64)
    largest = limits[-1]
    for row in range(len(cells)):
        cell = cells[row]
        metric_of(cell, False, metric)
        invert(metric, inverse)
        shortest = np.sqrt(min(metric[0, 0], metric[1, 1], metric[2, 2]))
        # Lattice part <= r: lengths change by r / |a| and angles by r / |a| at most. Entries of the metric at unit
        # edges then change by 3 r / |a| together at most in a row of 3, the inverse of such a reduced metric is below
        # 4, and the strain is a quarter of the product.
        reach = min(0.1, 9.0 * largest / shortest)
        n = two_fold_axes(metric, inverse, reach, axes, strains)
        while n < 0:
            reach *= 0.5
            n = two_fold_axes(metric, inverse, reach, axes, strains)
        found = 0
        for p in range(3):
            for q in range(3):
                m[p, q] = 1 if p == q else 0
        found = _add_rotation(m, rotations, found)
        for i in range(n):
            for p in range(3):
                for q in range(3):
                    # Rows are images of basis vectors: e_p -> -e_p + 2 u_p t / k.
                    twofold[i, p, q] = 2 * axes[i, 3 + p] * axes[i, q] // axes[i, 6] - (1 if p == q else 0)
            found = _add_rotation(twofold[i], rotations, found)
        for i in range(n):
            for j in range(n):
                trace = 0
                for p in range(3):
                    for q in range(3):
                        s = 0
                        for r in range(3):
                            s += twofold[i, p, r] * twofold[j, r, q]
                        m[p, q] = s
                    trace += m[p, p]
                # Order 3, 4, 6. Products of order 2 are two-fold axes and in the list themselves.
                if 0 <= trace <= 2:
                    found = _add_rotation(m, rotations, found)
        first, last = offsets[row], offsets[row + 1]
        sites = last - first
        here = positions[first:last]
        # The rarest species, by its first site.
        site, least = 0, sites + 1
        for i in range(sites):
            c = 0
            for j in range(sites):
                if species[first + j] == species[first + i]:
                    c += 1
            if c < least:
                site, least = i, c
        rotated = np.empty((sites, 3))
        possible[row] = 0
        for k in range(len(limits)):
            counts[row, k] = 0
        for i in range(found):
            lattice = _lattice_residual(rotations[i], metric)
            if lattice > largest:
                continue
            for sign in range(-1, 2, 2):
                for k in range(sites):
                    for q in range(3):
                        x = 0.0
                        for p in range(3):
                            x += here[k, p] * rotations[i, p, q]
                        rotated[k, q] = sign * x
                for target in range(sites):
                    if species[first + target] != species[first + site]:
                        continue
                    residual, mean = _site_residual(rotated, site, here, species, first, target, cell, largest)
                    residual = max(residual, lattice)
                    if residual <= largest and mean <= 0.5 * largest * (1.0 + 1e-6):
                        possible[row] += 1
                    for k in range(len(limits)):
                        if residual <= limits[k]:
                            counts[row, k] += 1


def warm_up() -> None:
    """Compile the kernel for read-only crystals, as batches have them."""
    given = np.eye(3)[None] * 4.0, np.array([0, 1]), np.zeros((1, 3)), np.zeros(1, np.int32)
    for array in given:
        array.flags.writeable = False
    count_operations(*given, np.array([0.005, 0.02]), np.zeros((1, 2), np.int64), np.zeros(1, np.int64))
