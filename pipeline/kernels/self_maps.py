"""The ways to lay a crystal onto itself within a strain and a shift: its symmetry operations, and what is nearly one.

A way is an integer W (the vector x in fractions of the cell goes to x W), a site for every site, and how far each site
lands from that one. All ways are listed that take every site to within `reach` of its partner for some origin shift;
more may be. The search is exact while the balls hold one site each: 4 reach below the least distance of equal species
and the least height of the cell (`clear`). Lattice maps are complete (lattice_maps.py); the shift that takes the pinned
site onto its partner differs from the one looked for by at most `reach`, so that every other site is found within twice
that.
"""

from __future__ import annotations

import numpy as np

from .compiled import inner, kernel
from .lattice_maps import adjugate3, determinant3, lattice_maps, product3
from .match_columns import Crystals, Floats, Ints
from .pairing import nearest_pairing


@inner
def _metric(cell: Floats) -> Floats:
    g = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            g[i, j] = cell[i, 0] * cell[j, 0] + cell[i, 1] * cell[j, 1] + cell[i, 2] * cell[j, 2]
    return g


@inner
def _rarest(c: Crystals, k: int) -> int:
    rare = 0
    for s in range(1, c.blocks.shape[1] - 1):
        if c.blocks[k, s + 1] - c.blocks[k, s] < c.blocks[k, rare + 1] - c.blocks[k, rare]:
            rare = s
    return rare


@inner
def _placed(c: Crystals, k: int, w: Ints) -> Floats:
    """(n, 3): the sites of crystal k times W."""
    first = c.offsets[k]
    out = np.empty((c.offsets[k + 1] - first, 3))
    for i in range(out.shape[0]):
        for m in range(3):
            x = 0.0
            for j in range(3):
                x += c.positions[first + i, j] * w[j, m]
            out[i, m] = x
    return out


@kernel
def nearly_translated(c: Crystals, k: int, reach: float) -> bool:
    """Whether a difference of two sites of the rarest species takes every site to within `reach` of a like one.

    Exact while `reach` is below half the least height of the cell.
    """
    first = c.offsets[k]
    n = c.offsets[k + 1] - first
    targets, g = c.positions[first : first + n], _metric(c.cells[k])
    blocks = c.blocks[k] - first
    partner, images, d = np.empty(n, np.int64), np.empty((n, 3), np.int64), np.empty((n, 3))
    rare = _rarest(c, k)
    pin = c.blocks[k, rare]
    for q in range(pin + 1, c.blocks[k, rare + 1]):
        x, y, z = (
            c.positions[q, 0] - c.positions[pin, 0],
            c.positions[q, 1] - c.positions[pin, 1],
            c.positions[q, 2] - c.positions[pin, 2],
        )
        if nearest_pairing(targets, blocks, targets, blocks, g, x, y, z, reach * reach, partner, images, d):
            return True
    return False


@kernel
def self_maps(c: Crystals, k: int, strain: float, reach: float) -> tuple[Ints, Ints, Floats]:
    """All ways to lay crystal k onto itself: W (m, 3, 3), partners (m, n), offsets (m, n, 3).

    Sites are in the order of `c`, from 0; offsets are in fractions of the cell, with their mean removed:
    x W + t = x of the partner + offset, up to lattice vectors.
    """
    first, variant = c.offsets[k], c.variants[k]
    n = c.offsets[k + 1] - first
    matrix, basis = c.matrices[variant], c.bases[variant]
    total, maps, _ = lattice_maps(basis, basis, strain, c.planar[k])
    rare = _rarest(c, k)
    origins = c.blocks[k, rare + 1] - c.blocks[k, rare]
    w_out = np.empty((total * origins, 3, 3), np.int64)
    partners = np.empty((total * origins, n), np.int64)
    offsets = np.empty((total * origins, n, 3))
    g, blocks = _metric(c.cells[k]), c.blocks[k] - first
    sites = c.positions[first : first + n]
    pin = blocks[rare]
    partner, images, d = np.empty(n, np.int64), np.empty((n, 3), np.int64), np.empty((n, 3))
    limit2 = (2.0 * reach) ** 2
    back = adjugate3(matrix)
    det = determinant3(matrix)
    used = 0
    for m in range(total):
        w = product3(product3(matrix, maps[m]), back)
        for i in range(3):
            for j in range(3):
                w[i, j] //= det
        placed = _placed(c, k, w)
        for q in range(blocks[rare], blocks[rare + 1]):
            x, y, z = sites[q, 0] - placed[pin, 0], sites[q, 1] - placed[pin, 1], sites[q, 2] - placed[pin, 2]
            if not nearest_pairing(placed, blocks, sites, blocks, g, x, y, z, limit2, partner, images, d):
                continue
            mean = np.zeros(3)
            for t in range(n):
                for i in range(3):
                    mean[i] += d[t, i] / n
            for i in range(3):
                for j in range(3):
                    w_out[used, i, j] = w[i, j]
            for t in range(n):
                partners[used, t] = partner[t]
                for i in range(3):
                    offsets[used, t, i] = mean[i] - d[t, i]
            used += 1
    return w_out[:used], partners[:used], offsets[:used]
