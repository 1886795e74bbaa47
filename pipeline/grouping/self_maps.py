"""The ways to lay a crystal onto itself within a strain and a shift: its symmetry operations, and what is nearly one.

A way is an integer W (the vector x in fractions of the cell goes to x W), a site for every site, and how far each site
lands from that one. All ways are listed that take every site to within `reach` of its partner for some origin shift;
more may be. The search is exact while the balls hold one site each: 4 reach below the least distance of equal species
and the least height of the cell (`clear`). The shift that takes the pinned site onto its partner differs from the one
looked for by at most `reach`, so that every other site is found within twice that.

Lattice maps, as in kernels/lattice_maps.py: a vector of a reduced basis goes to one whose length differs by a factor of
at most exp(strain), and the i-th coefficient of a vector of length r is at most r times the length of the i-th
reciprocal vector. This is done once a hub, in NumPy: the compiled search would take longer to compile.
"""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray

from ..kernels.match_columns import Crystals
from ..model.batch import Floats, Ints

SLACK = 1e-9
"""Relative slack on the bounds of lattice maps, far above rounding and far below any tolerance."""


def lattice_self_maps(basis: Floats, strain: float, planar: bool) -> Ints:
    """(m, 3, 3): all integer U with det U = +-1 for which basis -> U @ basis has at most that strain.

    basis (3, 3): reduced, rows. planar: the third vector, perpendicular to the others, goes to itself or its opposite.
    """
    up = np.exp(strain) * (1.0 + SLACK)
    lengths = np.linalg.norm(basis, axis=1)
    longest = lengths[:2].max() if planar else lengths.max()
    box = np.floor(longest * up * np.linalg.norm(np.linalg.inv(basis), axis=0) * (1.0 + SLACK)).astype(np.int64)
    box[2] *= not planar
    integers = np.array(list(itertools.product(*(range(-b, b + 1) for b in box.tolist()))), dtype=np.int64)
    found = np.linalg.norm(integers @ basis, axis=1)
    shells = [integers[(found <= up * r) & (found * up >= r)] for r in lengths.tolist()]
    if planar:
        shells[2] = np.array([[0, 0, -1], [0, 0, 1]])
    index = np.indices([len(s) for s in shells]).reshape(3, -1)
    maps = np.stack([s[i] for s, i in zip(shells, index, strict=True)], axis=1)
    maps = maps[np.abs(np.rint(np.linalg.det(maps))) == 1.0]
    logs = np.log(np.linalg.svd(np.linalg.inv(basis) @ maps @ basis, compute_uv=False))
    return np.asarray(maps[np.abs(logs).max(axis=1, initial=0.0) <= strain + SLACK])


def _laid(c: Crystals, k: int, placed: Floats, pin: int, to: int, reach: float) -> tuple[bool, Ints, Floats]:
    """Sites of crystal k near `placed` (n, 3), moved so that site `pin` comes onto site `to`: whether every one has one
    of its species within `reach`, which, and how far it lies from there, in fractions."""
    sites = c.positions[c.offsets[k] : c.offsets[k + 1]]
    kinds = np.repeat(np.arange(c.blocks.shape[1] - 1), np.diff(c.blocks[k]))
    off = sites[None] - (placed - placed[pin] + sites[to])[:, None]
    off -= np.floor(off + 0.5)
    square = (np.square(off @ c.cells[k])).sum(axis=2)
    near = (square <= reach * reach) & (kinds[:, None] == kinds[None])
    partner = near.argmax(axis=1)
    return bool(near.any(axis=1).all()), partner, off[np.arange(len(sites)), partner]


def _rarest(c: Crystals, k: int) -> NDArray[np.int64]:
    """Sites of the rarest species, from 0."""
    rare = int(np.diff(c.blocks[k]).argmin())
    return np.asarray(np.arange(c.blocks[k, rare], c.blocks[k, rare + 1]) - c.offsets[k])


def nearly_translated(c: Crystals, k: int, reach: float) -> bool:
    """Whether a difference of two sites of the rarest species takes every site to within `reach` of a like one.

    Exact while `reach` is below half the least height of the cell.
    """
    pin, *others = _rarest(c, k).tolist()
    sites = c.positions[c.offsets[k] : c.offsets[k + 1]]
    return any(_laid(c, k, sites, pin, to, reach)[0] for to in others)


def self_maps(c: Crystals, k: int, strain: float, reach: float) -> tuple[Ints, Ints, Floats]:
    """All ways to lay crystal k onto itself: W (m, 3, 3), partners (m, n), offsets (m, n, 3).

    Sites are in the order of `c`, from 0; offsets are in fractions of the cell, with their mean removed:
    x W + t = x of the partner + offset, up to lattice vectors.
    """
    variant = c.variants[k]
    sites, matrix = c.positions[c.offsets[k] : c.offsets[k + 1]], c.matrices[variant]
    back = np.rint(np.linalg.inv(matrix)).astype(np.int64)  # the crystal's own lattice: det is +-1
    rare = _rarest(c, k).tolist()
    maps, partners, offsets = [], [], []
    for u in lattice_self_maps(c.bases[variant], strain, bool(c.planar[k])):
        w = matrix @ u @ back
        placed = sites @ w
        for to in rare:
            found, partner, off = _laid(c, k, placed, rare[0], to, 2.0 * reach)
            if found:
                maps.append(w)
                partners.append(partner)
                offsets.append(off.mean(axis=0) - off)
    n = len(sites)
    return (
        np.array(maps, dtype=np.int64).reshape(-1, 3, 3),
        np.array(partners, dtype=np.int64).reshape(-1, n),
        np.array(offsets, dtype=np.float64).reshape(-1, n, 3),
    )
