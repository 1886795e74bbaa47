"""Layers on their way through the canonical form: from the given frame to the close one, and on to the wide one.

lattice/layer.py says what the frames are. Batches without layers pass through untouched.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..kernels.canonical import FARTHEST
from ..lattice.layer import (
    CLEAR,
    FRAME,
    LEAD,
    THICKEST,
    UNCLEAR,
    close_layers,
    close_lengths,
    heights_of,
    is_plane_reduced,
)
from ..lattice.metric import metric
from ..lattice.niggli import is_niggli_reduced
from ..model.batch import Codes, CrystalBatch, Floats, Ints, select
from ..model.refusals import Refusal


@dataclass(frozen=True, slots=True)
class GivenFrames:
    """A batch as the steps of the canonical form take it, m sites."""

    close: CrystalBatch
    """Layers in the close frame of the given cell, their slab around the middle of the third row; bulk as given."""

    positions: Floats
    """(m, 3): what the way back is written for: layers upright in the wide frame, bulk as given."""

    turns: Ints | None
    """(m,): third rows taken off each given site; None where the batch has no layers."""

    refusals: dict[int, Refusal]
    """Layers whose heights are not known, by row."""


def given_frames(batch: CrystalBatch) -> GivenFrames:
    """Put the layers of a batch upright."""
    rows = np.flatnonzero(batch.periodicity == 2)
    if not len(rows):
        return GivenFrames(batch, batch.positions, None, {})
    part = select(batch, rows)
    found = heights_of(part)
    refusals = {}
    for i in np.flatnonzero(found.outcome != CLEAR).tolist():
        first, second = found.gaps[i]
        if found.outcome[i] == UNCLEAR:
            message = (
                f"the layer has no clear gap along its normal: the largest is {first:.2f} angstrom, the next "
                f"{second:.2f} (at least {LEAD:g} more is needed, and sites within one third vector)"
            )
        else:
            message = f"the layer is {found.thickness[i]:.0f} angstrom thick, more than {THICKEST:g}"
        refusals[int(rows[i])] = Refusal("layer_unclear", message, "canonical")
    counts = np.diff(part.offsets)
    owner = np.repeat(np.arange(len(part)), counts)
    cells, place = found.cells.copy(), found.positions.copy()
    good = ~found.flat & (counts > 0)
    lengths = np.where(good, close_lengths(np.where(good[:, None, None], cells, np.eye(3)), found.thickness), FRAME)
    middle = np.zeros(len(part))
    heights = place[:, 2] * FRAME
    filled = np.flatnonzero(counts)
    if len(filled):
        starts = part.offsets[:-1][filled]
        middle[filled] = (np.maximum.reduceat(heights, starts) + np.minimum.reduceat(heights, starts)) / 2
    place[:, 2] = (heights - middle[owner]) / lengths[owner] + 0.5
    cells[good, 2] *= (lengths[good] / FRAME)[:, None]
    # Heights are counted within one third row, which would hide that a coordinate has lost its digits.
    place[~(np.abs(part.positions[:, 2]) < FARTHEST)] = np.nan
    all_cells, close, upright = batch.cells.copy(), batch.positions.copy(), batch.positions.copy()
    turns = np.zeros(len(batch.positions), np.int64)
    sites = np.repeat(batch.periodicity == 2, np.diff(batch.offsets))
    all_cells[rows], close[sites], upright[sites], turns[sites] = cells, place, found.positions, found.turns
    return GivenFrames(replace(batch, cells=all_cells, positions=close), upright, turns, refusals)


def wide_layers(crystals: CrystalBatch, thirds: Floats) -> CrystalBatch:
    """Crystals whose layers have third coordinates in units of `thirds` (n,) angstrom, modulo 1, with the layers in the
    wide frame: the third row (0, 0, FRAME) and signed heights above the first site over FRAME."""
    layers = crystals.periodicity == 2
    if not layers.any():
        return crystals
    cells, positions = crystals.cells.copy(), crystals.positions.copy()
    cells[layers, 2] = (0.0, 0.0, FRAME)
    counts = np.diff(crystals.offsets)
    sites = np.repeat(layers, counts)
    z = positions[sites, 2]
    positions[sites, 2] = (z - np.rint(z)) * np.repeat(thirds, counts)[sites] / FRAME
    return replace(crystals, cells=cells, positions=positions)


def are_reduced(crystals: CrystalBatch, levels: Floats, multiplicity: Ints) -> NDArray[np.bool_]:
    """(n,): whether canonical cells are Niggli-reduced at their tolerances (levels, at cell volume 1); of layers, in
    the close frame, and whether their plane is reduced and apart from the normal."""
    packed = close_layers(crystals)
    ok = is_niggli_reduced(metric(packed.cells), levels)
    layers = np.flatnonzero(crystals.periodicity == 2)
    if len(layers):
        epsilon = levels[layers] * packed.volumes[layers] ** (2.0 / 3.0)
        k = multiplicity[layers]
        apart = (k[:, :2, 2] == 0).all(axis=1) & (k[:, 2, :2] == 0).all(axis=1) & (np.abs(k[:, 2, 2]) == 1)
        ok[layers] &= is_plane_reduced(crystals.cells[layers], 1.000001 * epsilon) & apart
    return ok


def origins(
    positions: Floats, site_map: Codes, given_offsets: Ints, crystals: CrystalBatch, multiplicity: Ints, origin: Floats
) -> Floats:
    """The origins (n, 3) with the heights of layers in the wide frame: where the mean of the given sites puts them.

    positions (m, 3): as GivenFrames has them; origin (n, 3): as the kernels found it, in the close frame for layers.
    """
    layers = crystals.periodicity == 2
    if not layers.any():
        return origin
    counts = np.diff(given_offsets)
    crystal = np.repeat(np.arange(len(crystals)), counts)
    above = multiplicity[crystal, 2, 2] * positions[:, 2]
    above -= crystals.positions[crystals.offsets[crystal] + site_map, 2]
    mean = np.add.reduceat(above, given_offsets[:-1]) / counts
    out = origin.copy()
    out[layers, 2] = mean[layers]
    return out
