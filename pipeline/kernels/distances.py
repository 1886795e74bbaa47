"""Sorted distances from every site to its nearest neighbours, over all species and for one species at a time.

Nothing nearer is missed. Every point within a radius is visited: the cell is brought to lower-triangular form, so that
|z| <= R bounds the third integer, then y^2 <= R^2 - z^2 the second, then x^2 <= R^2 - z^2 - y^2 the first, each
interval exactly. When the closed ball holds at least k points, the k nearest lie inside it, because any point outside
is farther than all of them; when it holds fewer, the radius grows and the site is done again.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel

SPHERE_SURPLUS = 1.3
"""Expected points in the first ball over k: few sites then need a second, larger one."""

RADIUS_GROWTH = 1.15
"""Factor on the radius while the ball holds fewer than k points."""


@inner
def lower_triangle(cell: NDArray[np.float64]) -> NDArray[np.float64]:
    """The lower-triangular cell of equal metric with positive diagonal: Gram-Schmidt on the rows of `cell` (3, 3)."""
    out = np.zeros((3, 3))
    a, b, c = cell[0], cell[1], cell[2]
    la = math.sqrt(a[0] * a[0] + a[1] * a[1] + a[2] * a[2])
    e0, e1, e2 = a[0] / la, a[1] / la, a[2] / la
    out[0, 0] = la
    bx = b[0] * e0 + b[1] * e1 + b[2] * e2
    r0, r1, r2 = b[0] - bx * e0, b[1] - bx * e1, b[2] - bx * e2
    by = math.sqrt(r0 * r0 + r1 * r1 + r2 * r2)
    f0, f1, f2 = r0 / by, r1 / by, r2 / by
    out[1, 0], out[1, 1] = bx, by
    cx = c[0] * e0 + c[1] * e1 + c[2] * e2
    cy = c[0] * f0 + c[1] * f1 + c[2] * f2
    r0, r1, r2 = c[0] - cx * e0 - cy * f0, c[1] - cx * e1 - cy * f1, c[2] - cx * e2 - cy * f2
    out[2, 0], out[2, 1], out[2, 2] = cx, cy, math.sqrt(r0 * r0 + r1 * r1 + r2 * r2)
    return out


@inner
def _ball(
    low: NDArray[np.float64],
    f0: float,
    f1: float,
    f2: float,
    radius2: float,
    planar: bool,
    own: bool,
    buffer: NDArray[np.float64],
    used: int,
) -> int:
    """Append the squared lengths of all f + n (n integer) in the closed ball; returns the new count, or -1 when full.

    own: the point n = -f (the site itself, f = 0) is left out. planar: the third integer is 0.
    """
    ax, bx, by = low[0, 0], low[1, 0], low[1, 1]
    cx, cy, cz = low[2, 0], low[2, 1], low[2, 2]
    if planar:
        low3, high3 = 0, 0
    else:
        reach = math.sqrt(radius2) / cz
        low3, high3 = math.ceil(-reach - f2), math.floor(reach - f2)
    for n3 in range(low3, high3 + 1):
        w = f2 + n3
        z = w * cz
        left2 = radius2 - z * z
        if left2 < 0:
            continue
        y0 = w * cy + f1 * by
        reach = math.sqrt(left2)
        for n2 in range(math.ceil((-reach - y0) / by), math.floor((reach - y0) / by) + 1):
            y = y0 + n2 * by
            left1 = left2 - y * y
            if left1 < 0:
                continue
            x0 = w * cx + (f1 + n2) * bx + f0 * ax
            reach1 = math.sqrt(left1)
            first = math.ceil((-reach1 - x0) / ax)
            last = math.floor((reach1 - x0) / ax)
            if used + last - first + 1 > buffer.shape[0]:
                return -1
            rest = z * z + y * y
            for n1 in range(first, last + 1):
                if own and n1 == 0 and n2 == 0 and n3 == 0:
                    continue
                x = x0 + n1 * ax
                buffer[used] = rest + x * x
                used += 1
    return used


@inner
def _sort_ball(
    values: NDArray[np.float64], lo: int, hi: int, radius2: float, scratch: NDArray[np.float64], ends: NDArray[np.int64]
) -> None:
    """Sort values[lo:hi], squared distances in a ball, in place.

    Points in a ball are nearly uniform in r^3, so one pass of counting by r^3 leaves them almost in order, and the
    insertion that follows finishes whatever their distribution was.
    """
    n = hi - lo
    if n > 8:
        scale = n / (radius2 * math.sqrt(radius2)) * (1.0 - 1e-9)
        for t in range(n + 1):
            ends[t] = 0
        for t in range(lo, hi):
            scratch[t - lo] = values[t]
            ends[min(int(values[t] * math.sqrt(values[t]) * scale), n - 1) + 1] += 1
        for t in range(n):
            ends[t + 1] += ends[t]
        for t in range(n):
            b = min(int(scratch[t] * math.sqrt(scratch[t]) * scale), n - 1)
            values[lo + ends[b]] = scratch[t]
            ends[b] += 1
    for t in range(lo + 1, hi):
        v = values[t]
        u = t - 1
        while u >= lo and values[u] > v:
            values[u + 1] = values[u]
            u -= 1
        values[u + 1] = v


@kernel
def species_means(
    total: NDArray[np.float64], offsets: NDArray[np.int64], ranks: NDArray[np.int64], firsts: NDArray[np.int64]
) -> NDArray[np.float32]:
    """Column means (r, k) float32 of `total` (m, k) over the sites of each species of each crystal.

    firsts (n + 1,): the first row of each crystal. The sums run over integers of 2^-32 angstrom, so that the order of
    the sites moves no bit of the result.
    """
    k = total.shape[1]
    sums = np.zeros((firsts[-1], k), np.int64)
    sizes = np.zeros(firsts[-1], np.int64)
    means = np.empty((firsts[-1], k), np.float32)
    for c in range(offsets.shape[0] - 1):
        for i in range(offsets[c], offsets[c + 1]):
            row = firsts[c] + ranks[i]
            sizes[row] += 1
            for t in range(k):
                sums[row, t] += np.int64(total[i, t] * 4294967296.0 + 0.5)
    for row in range(firsts[-1]):
        for t in range(k):
            means[row, t] = np.float32(sums[row, t] / (4294967296.0 * sizes[row]))
    return means


@kernel
def neighbour_distances(
    cells: NDArray[np.float64],
    offsets: NDArray[np.int64],
    positions: NDArray[np.float64],
    ranks: NDArray[np.int64],
    planar: NDArray[np.bool_],
    kinds: int,
    k: int,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
    """Distances to the k nearest neighbours of every site of a batch.

    cells (n, 3, 3), angstrom, rows are vectors; offsets (n + 1,); positions (m, 3), fractional; ranks (m,): species of
    a site as its rank 0, 1, ... among the species of its own crystal; planar (n,): periodic in the first two rows
    alone; kinds: the largest number of species in one crystal.

    Returns, all in site order: `total` (m, k) float64, angstrom, ascending; `grouped` (m, k): the same distances
    ordered by species of the neighbour, ascending within each; `counts` (m, kinds) int64: how many of the k are of
    each species. The counted neighbours of a species are its nearest; every further one is at least as far as total[:,
    -1].
    """
    sites = positions.shape[0]
    total = np.empty((sites, k))
    grouped = np.empty((sites, k))
    counts = np.zeros((sites, kinds), np.int64)
    buffer = np.empty(16 * k + 64)
    scratch = np.empty(buffer.shape[0])
    ends = np.empty(buffer.shape[0] + 1, np.int64)
    starts = np.zeros(kinds + 1, np.int64)
    heads = np.zeros(kinds, np.int64)
    order = np.empty(sites, np.int64)
    for c in range(cells.shape[0]):
        low = lower_triangle(cells[c])
        first, last = offsets[c], offsets[c + 1]
        n = last - first
        used = 0
        for s in range(kinds):
            for j in range(first, last):
                if ranks[j] == s:
                    order[used] = j
                    used += 1
        if planar[c]:
            base = math.sqrt(SPHERE_SURPLUS * k * low[0, 0] * low[1, 1] / (math.pi * n))
        else:
            volume = low[0, 0] * low[1, 1] * low[2, 2]
            base = (3.0 * volume * SPHERE_SURPLUS * k / (4.0 * math.pi * n)) ** (1.0 / 3.0)
        for i in range(first, last):
            radius = base
            while True:
                used = 0
                kind = 0
                starts[0] = 0
                for place in range(n):
                    j = order[place]
                    while kind < ranks[j]:
                        kind += 1
                        starts[kind] = used
                    f0 = positions[j, 0] - positions[i, 0]
                    f1 = positions[j, 1] - positions[i, 1]
                    f2 = positions[j, 2] - positions[i, 2]
                    got = _ball(low, f0, f1, f2, radius * radius, planar[c], j == i, buffer, used)
                    while got < 0:
                        larger = np.empty(2 * buffer.shape[0])
                        for t in range(used):
                            larger[t] = buffer[t]
                        buffer = larger
                        scratch = np.empty(buffer.shape[0])
                        ends = np.empty(buffer.shape[0] + 1, np.int64)
                        got = _ball(low, f0, f1, f2, radius * radius, planar[c], j == i, buffer, used)
                    used = got
                while kind < kinds:
                    kind += 1
                    starts[kind] = used
                if used >= k:
                    break
                radius *= RADIUS_GROWTH
            for s in range(kinds):
                _sort_ball(buffer, starts[s], starts[s + 1], radius * radius, scratch, ends)
                heads[s] = starts[s]
            for t in range(k):
                best = -1
                for s in range(kinds):
                    if heads[s] < starts[s + 1] and (best < 0 or buffer[heads[s]] < buffer[heads[best]]):
                        best = s
                total[i, t] = math.sqrt(buffer[heads[best]])
                heads[best] += 1
            t = 0
            for s in range(kinds):
                counts[i, s] = heads[s] - starts[s]
                for h in range(starts[s], heads[s]):
                    grouped[i, t] = math.sqrt(buffer[h])
                    t += 1
    return total, grouped, counts


def warm_up() -> None:
    """Compile the kernels for read-only batches, as they come."""
    cells, offsets, positions = np.eye(3)[None] * 3.0, np.array([0, 1]), np.zeros((1, 3))
    for array in (cells, offsets, positions):
        array.flags.writeable = False
    ranks = np.zeros(1, np.int64)
    total, _, _ = neighbour_distances(cells, offsets, positions, ranks, np.zeros(1, np.bool_), 1, 4)
    species_means(total, offsets, ranks, np.array([0, 1]))
