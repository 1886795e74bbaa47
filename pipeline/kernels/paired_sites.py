"""Sites of two matched crystals in their common cell: images, mean metric, and the pairing at an origin shift."""

from __future__ import annotations

import math

import numpy as np

from .compiled import inner
from .hermite import hermite
from .lattice_maps import inverse3, product3
from .match_columns import Crystals, Floats, Ints
from .pairing import bottleneck_pairing, length2, nearest_pairing

UNIT = 1e-9
"""Shifts and strains are compared after rounding to this (angstrom; dimensionless)."""


@inner
def mean_metric(cell_a: Floats, cell_b: Floats, w: Floats) -> Floats:
    """(G_A + G_B) / 2 of matched cells, for vectors in fractions of cell_b; w takes fractions of cell_a to those."""
    image = product3(inverse3(w), cell_a)
    g = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            total = 0.0
            for k in range(3):
                total += image[i, k] * image[j, k] + cell_b[i, k] * cell_b[j, k]
            g[i, j] = 0.5 * total
    return g


@inner
def images_of(c: Crystals, a: int, p: Ints, w: Floats) -> tuple[Floats, Ints]:
    """Sites of crystal `a` in its cell p @ cell, in fractions of the other cell, and where its species begin.

    Site i in coset j (hermite.py) of p is row i |det p| + j.
    """
    h = hermite(p)
    index = h[0, 0] * h[1, 1] * h[2, 2]
    first = c.offsets[a]
    count = c.offsets[a + 1] - first
    out = np.empty((count * index, 3))
    k = 0
    for i in range(first, first + count):
        for n0 in range(h[0, 0]):
            for n1 in range(h[1, 1]):
                for n2 in range(h[2, 2]):
                    x, y, z = c.positions[i, 0] + n0, c.positions[i, 1] + n1, c.positions[i, 2] + n2
                    for m in range(3):
                        out[k, m] = x * w[0, m] + y * w[1, m] + z * w[2, m]
                    k += 1
    kinds = c.blocks.shape[1]
    blocks = np.empty(kinds, np.int64)
    for s in range(kinds):
        blocks[s] = (c.blocks[a, s] - first) * index
    return out, blocks


@inner
def pair_up(
    c: Crystals,
    a: int,
    b: int,
    unambiguous: bool,
    targets: Floats,
    target_blocks: Ints,
    g: Floats,
    s: Floats,
    limit: float,
    cap: float,
    common: Ints,
    partner: Ints,
    images: Ints,
    d: Floats,
) -> float:
    """Pair the sites for origin shift `s` (fractions of b's cell), take the mean out, return the largest shift.

    Negative when a site finds no partner within `limit` or the result is above `cap`. `s` is changed to the shift with
    the mean taken in, d and partner belong to it. Where the pairing is ambiguous it is taken again at the new origin
    until it stays as it is.
    """
    count = targets.shape[0]
    largest2 = -1.0
    reach = limit
    previous = np.empty((0, 4), np.int64)
    for _ in range(1 if unambiguous else 20):
        if unambiguous:
            ok = nearest_pairing(
                targets, target_blocks, c.positions, c.blocks[b], g, s[0], s[1], s[2], reach * reach, partner, images, d
            )
        else:
            first = c.offsets[b]
            ok = bottleneck_pairing(
                targets,
                target_blocks,
                c.positions[first : c.offsets[b + 1]],
                c.blocks[b] - first,
                g,
                s[0],
                s[1],
                s[2],
                reach * reach,
                common,
                partner,
                images,
                d,
            )
            if ok:
                for t in range(count):
                    partner[t] += first
        if not ok:
            return -1.0
        x, y, z = 0.0, 0.0, 0.0
        for t in range(count):
            x, y, z = x + d[t, 0], y + d[t, 1], z + d[t, 2]
        x, y, z = x / count, y / count, z / count
        s[0], s[1], s[2] = s[0] + x, s[1] + y, s[2] + z
        largest2 = 0.0
        for t in range(count):
            d[t, 0], d[t, 1], d[t, 2] = d[t, 0] - x, d[t, 1] - y, d[t, 2] - z
            largest2 = max(largest2, length2(g, d[t, 0], d[t, 1], d[t, 2]))
        if unambiguous:
            break
        same = previous.shape[0] == count
        if same:
            for t in range(count):
                if previous[t, 0] != partner[t]:
                    same = False
                for m in range(3):
                    if previous[t, m + 1] != images[t, m]:
                        same = False
        if same:
            break
        previous = np.empty((count, 4), np.int64)
        for t in range(count):
            previous[t, 0] = partner[t]
            for m in range(3):
                previous[t, m + 1] = images[t, m]
        reach = math.sqrt(largest2) + UNIT
    largest = math.sqrt(largest2)
    return largest if largest <= cap + UNIT else -1.0
