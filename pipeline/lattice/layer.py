"""Layers: structures with two periods, and the frame in which they are compared.

What a layer is. Two rows of its cell, a and b, are periods; the third is only a frame. So a layer is its plane lattice
and its sites, each with in-plane fractions and a height along the unit normal of the plane in angstrom. The vacuum (the
length and the tilt of the third row) is not part of it, nor is where along the normal it lies, nor which way up.

From a file to heights. Files write layers as if the third row were a period too: a slab may stand across a face of
the cell, one part at the bottom and the rest at the top. The heights modulo the third row leave gaps; the slab is what
remains when the circle is cut in its largest gap. Where the largest is not at least LEAD wider than the next, or the
sites reach over more than one third row, the file does not say which sites are above which: such a record is refused
(`layer_unclear`), and so is one that is thicker than THICKEST.

Two frames for one layer. The *wide* frame has the third row FRAME along the normal, the same for all layers, so that
two of them have one third row exactly and a match cannot stretch it; a height is the fraction times FRAME. Canonical
layers are kept in it. The *close* frame has a third row of 2 T + 2 M, with T the thickness and M the length of the
longer of the two shortest independent periods: a number that follows the layer alone. In it a layer is described as a
bulk crystal is: the third row is longer than every short period and perpendicular to them, so every reduced basis of
that crystal is one of the plane with the normal up or down, its rotations are those of the layer, and no translation
along the normal can map a slab of thickness T onto itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..model.batch import CrystalBatch, Floats, Ints

FRAME = 1024.0
"""Length (angstrom) of the third row of the wide frame: a power of two, so that heights keep all their digits."""

THICKEST = 500.0
"""Largest thickness of a layer, angstrom: below half of FRAME, so that the nearest image is the site itself."""

LEAD = 1.0
"""The gap a layer is cut in is wider than the next by at least this, angstrom."""

CLEAR, UNCLEAR, TOO_THICK = range(3)
"""Outcomes of reading heights."""

STEPS = 200
"""Steps of the plane reduction; each shortens a vector, so that real cells end far below."""


@dataclass(frozen=True, slots=True)
class Uprights:
    """Layers of a batch of l with s sites in the wide frame."""

    outcome: Ints
    """(l,): CLEAR, or why the heights are not known."""

    flat: NDArray[np.bool_]
    """(l,): the cell has no volume."""

    gaps: Floats
    """(l, 2): the largest gap and the next, angstrom."""

    cells: Floats
    """(l, 3, 3): rows a and b as given, and FRAME along the normal, on the side of the given third row. Layers whose
    cell has no volume keep the given one."""

    positions: Floats
    """(s, 3): fractions of that; the third is not taken modulo 1."""

    turns: Ints
    """(s,): third rows taken off each given site, so that the slab is in one piece."""

    thickness: Floats
    """(l,): largest difference of heights, angstrom."""


def heights_of(batch: CrystalBatch) -> Uprights:
    """All crystals of a batch taken as layers, put upright in the wide frame.

    With w = turns and T = given_cell cell^-1: position = (given_position - (0, 0, w)) T. Never raises; a cell without
    volume and positions that are not finite pass through.
    """
    cells, offsets = batch.cells, batch.offsets
    n = len(batch)
    owner = np.repeat(np.arange(n), np.diff(offsets))
    with np.errstate(all="ignore"):
        normal = np.cross(cells[:, 0], cells[:, 1])
        area = np.linalg.norm(normal, axis=1)
        normal /= area[:, None]
        across = np.einsum("nk,nk->n", normal, cells[:, 2])
        flat = ~(np.abs(across) > 1e-12 * np.linalg.norm(cells[:, 2], axis=1)) | ~np.isfinite(across)
        normal *= np.sign(across)[:, None]
        spacing = np.where(flat, 1.0, np.abs(across))
        upright = np.concatenate([cells[:, :2], FRAME * normal[:, None]], axis=1)
        upright[flat] = cells[flat]
        z = np.where(np.isfinite(batch.positions[:, 2]), batch.positions[:, 2], 0.0)
        cut, gaps = _largest_gaps(z, owner, offsets, spacing)
        turns = np.floor(z - cut[owner])
        # The third given row is a fraction of the third row here, and whatever it has in the plane.
        change = np.zeros((n, 3, 3))
        change[:] = np.eye(3)
        change[~flat, 2] = np.linalg.solve(np.swapaxes(upright[~flat], 1, 2), cells[~flat, 2][:, :, None])[:, :, 0]
        moved = batch.positions.copy()
        moved[:, 2] -= turns
        positions = np.einsum("mi,mij->mj", moved, change[owner])
    thickness = spread(positions[:, 2] * FRAME, offsets)
    outcome = np.full(n, CLEAR, np.int64)
    outcome[thickness > THICKEST] = TOO_THICK
    unclear = (gaps[:, 0] < gaps[:, 1] + LEAD) & (np.diff(offsets) > 1)
    outcome[unclear | (spread(z, offsets) >= 1.0)] = UNCLEAR
    outcome[flat] = CLEAR
    return Uprights(outcome, flat, gaps, upright, positions, turns.astype(np.int64), thickness)


def _largest_gaps(z: Floats, owner: Ints, offsets: Ints, spacing: Floats) -> tuple[Floats, Floats]:
    """Middle of the largest gap of each layer on the circle of length 1, and the two largest gaps in angstrom."""
    n = len(offsets) - 1
    cut, gaps = np.zeros(n), np.zeros((n, 2))
    filled = np.flatnonzero(np.diff(offsets) > 0)
    if not len(filled):
        return cut, gaps
    starts, ends = offsets[:-1][filled], offsets[1:][filled] - 1
    circle = z - np.floor(z)
    circle = circle[np.lexsort((circle, owner))]
    after = np.empty_like(circle)
    after[:-1] = circle[1:]
    after[ends] = circle[starts] + 1.0
    gap = after - circle
    last = np.lexsort((np.arange(len(gap)), gap, owner))[ends]
    gaps[filled, 0] = gap[last] * spacing[filled]
    cut[filled] = circle[last] + 0.5 * gap[last]
    gap[last] = 0.0
    gaps[filled, 1] = np.maximum.reduceat(gap, starts) * spacing[filled]
    return cut, gaps


def spread(values: Floats, offsets: Ints) -> Floats:
    """(n,): largest less smallest of each range; 0 where it is empty."""
    out = np.zeros(len(offsets) - 1)
    filled = np.flatnonzero(np.diff(offsets) > 0)
    if len(filled):
        starts = offsets[:-1][filled]
        out[filled] = np.maximum.reduceat(values, starts) - np.minimum.reduceat(values, starts)
    return out


def plane_minima(cells: Floats) -> Floats:
    """(n, 2): lengths of the two shortest independent periods of the first two rows of cells (n, 3, 3), ascending.

    Lagrange's reduction without a tolerance, so that the lengths are continuous in the cell.
    """
    a, b = cells[:, 0].copy(), cells[:, 1].copy()
    with np.errstate(all="ignore"):
        for _ in range(STEPS):
            aa, bb = np.einsum("nk,nk->n", a, a), np.einsum("nk,nk->n", b, b)
            swap = aa > bb
            a[swap], b[swap] = b[swap], a[swap]
            aa = np.minimum(aa, bb)
            factor = np.rint(np.einsum("nk,nk->n", a, b) / aa)
            factor[~np.isfinite(factor)] = 0.0
            if not factor.any():
                break
            b -= factor[:, None] * a
        lengths = np.sqrt(np.stack([np.einsum("nk,nk->n", v, v) for v in (a, b)], axis=1))
    return np.asarray(np.sort(lengths, axis=1))


def close_lengths(cells: Floats, thickness: Floats) -> Floats:
    """(n,): third row of the close frame, angstrom, of layers with these cells (n, 3, 3) and thicknesses (n,)."""
    return np.asarray(2.0 * thickness + 2.0 * plane_minima(cells)[:, 1])


def with_third_row(cells: Floats, positions: Floats, offsets: Ints, lengths: Floats) -> tuple[Floats, Floats]:
    """Cells (n, 3, 3) whose third row is along the normal, with that row `lengths` (n,) long, and positions (m, 3) of
    the same sites in them."""
    now = np.linalg.norm(cells[:, 2], axis=1)
    new = cells.copy()
    new[:, 2] *= (lengths / now)[:, None]
    moved = positions.copy()
    moved[:, 2] *= np.repeat(now / lengths, np.diff(offsets))
    return new, moved


def close_layers(crystals: CrystalBatch) -> CrystalBatch:
    """Canonical crystals with the layers among them in the close frame; bulk crystals as they are."""
    layers = crystals.periodicity == 2
    if not layers.any():
        return crystals
    cells = crystals.cells.copy()
    lengths = np.linalg.norm(cells[:, 2], axis=1)
    thickness = spread(crystals.positions[:, 2] * np.repeat(lengths, np.diff(crystals.offsets)), crystals.offsets)
    lengths[layers] = close_lengths(cells[layers], thickness[layers])
    cells, positions = with_third_row(cells, crystals.positions, crystals.offsets, lengths)
    bulk = np.repeat(~layers, np.diff(crystals.offsets))
    cells[~layers], positions[bulk] = crystals.cells[~layers], crystals.positions[bulk]
    return CrystalBatch(cells, crystals.offsets, positions, crystals.species, crystals.tokens, crystals.periodicity)


def is_plane_reduced(cells: Floats, epsilon: Floats) -> NDArray[np.bool_]:
    """Which cells (n, 3, 3) are reduced in the plane: a no longer than b, their angle from 90 degrees up to where a + b
    would be shorter than b (Lagrange 1773), and the third row perpendicular to both and pointing up.

    epsilon (n,): tolerance of each comparison, square angstrom. Shares no code with the reduction.
    """
    a, b, c = cells[:, 0], cells[:, 1], cells[:, 2]
    aa, bb, ab = (np.einsum("nk,nk->n", x, y) for x, y in ((a, a), (b, b), (a, b)))
    unit = c / np.linalg.norm(c, axis=1)[:, None]
    level = np.maximum(np.abs(np.einsum("nk,nk->n", a, unit)), np.abs(np.einsum("nk,nk->n", b, unit)))
    ok = (aa <= bb + epsilon) & (2 * ab <= epsilon) & (-2 * ab <= aa + epsilon)
    return np.asarray(ok & (level <= 1e-9 * np.sqrt(bb)) & (np.einsum("nk,nk->n", np.cross(a, b), c) > 0))


def areas(cells: Floats) -> Floats:
    """(n,): area of the plane cell of cells (n, 3, 3), square angstrom."""
    return np.asarray(np.linalg.norm(np.cross(cells[:, 0], cells[:, 1]), axis=1))
