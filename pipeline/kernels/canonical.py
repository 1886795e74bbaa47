"""From a batch of crystals as given to their canonical crystals (compiled).

Three stages over the batch: `prepare` turns left-handed bases over, reduces, and looks for overlapping sites;
translations.primitive_crystals divides out the exact translations; `describe` lists all reduced bases, takes the
smallest description, and notes how the given crystal is recovered from it. They are separate kernels because numba
optimises the code of a callee anew in each caller.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..lattice.layer import close_lengths, spread, with_third_row
from ..model.batch import Codes, Floats, Ints
from ..tolerances import GRID, GRID_OFFSET
from .bases import MOST_BASES, reduced_bases
from .compiled import inner, kernel
from .integers import adjugate, copy_matrix, multiply
from .niggli import LEVEL_STEP, LEVELS, reduce_cell, six_numbers
from .ordering import MOST_KINDS, smallest_description
from .overlap import closest_overlap
from .translations import primitive_crystals
from .vectors import row_dot, through, transform, volume, wrapped

DONE, CELL_ABSURD, CELL_ZERO, NOT_REDUCED, OVERLAP, NO_SITES, TOO_MANY_KINDS, NOT_FINITE = range(8)
"""Outcomes of a crystal, in the column `outcome`."""

BROKEN = (CELL_ABSURD, CELL_ZERO, NO_SITES, NOT_FINITE)
"""Outcomes of records whose numbers mean nothing."""

ZERO_VOLUME = 1e-12
FLAT_VOLUME = 1e-9
"""Volume over the product of the edges below which a cell is none, or is too flat for double precision to reduce."""

FARTHEST = 1e6
"""Fractional coordinates beyond this have lost the digits that the canonical form needs."""


@inner
def rank_species(species: Codes, kind: Ints, order: Ints) -> int:
    """Rank the species of one crystal by (number of sites, code) and sort its sites by rank.

    species (n,) int32; fills kind (n,) int64, ascending ranks from 0, and order (n,) int64: the
    given site of each entry.
    Returns the number of species.
    """
    n = len(species)
    codes = np.empty(n, np.int32)
    counts = np.zeros(n, np.int64)
    place = np.empty(n, np.int64)
    known = 0
    for j in range(n):
        c = 0
        while c < known and codes[c] != species[j]:
            c += 1
        if c == known:
            codes[c] = species[j]
            known += 1
        counts[c] += 1
        place[j] = c
    rank = np.empty(known, np.int64)
    start = np.zeros(known, np.int64)
    for c in range(known):
        r = 0
        for other in range(known):
            if counts[other] < counts[c] or (counts[other] == counts[c] and codes[other] < codes[c]):
                r += 1
                start[c] += counts[other]
        rank[c] = r
    for j in range(n):
        c = place[j]
        order[start[c]] = j
        kind[start[c]] = rank[c]
        start[c] += 1
    return known


@inner
def metric_number(six: tuple[float, float, float, float, float, float], k: int) -> int:
    """Entry k of the metric on the grid, floor(x N + phi): aa, bb, cc, bc, ac, ab from A, B, C, xi, eta, zeta."""
    x = six[k] if k < 3 else 0.5 * six[k]
    return int(np.floor(x * GRID + GRID_OFFSET))


@inner
def smallest_metrics(cell: Floats, sites: int, bases: Ints, count: int, inverses: Ints) -> int:
    """Keep the bases (count, 3, 3) whose metric M cell, over (volume / sites)^(2/3) and on the grid, is the smallest.

    They are moved to the front, in their order; inverses (>= count, 3, 3) is filled for them. Returns their number.
    """
    frame = np.empty((3, 3))
    least = np.empty(6, np.int64)
    scale = (abs(volume(cell)) / sites) ** (-2.0 / 3.0)
    kept = 0
    for c in range(count):
        transform(bases[c], cell, frame)
        six = six_numbers(frame, scale)
        numbers = (
            metric_number(six, 0),
            metric_number(six, 1),
            metric_number(six, 2),
            metric_number(six, 3),
            metric_number(six, 4),
            metric_number(six, 5),
        )
        difference = 0
        if kept > 0:
            for k in range(6):
                difference = numbers[k] - least[k]
                if difference != 0:
                    break
        if difference > 0:
            continue
        if difference < 0 or kept == 0:
            kept = 0
            for k in range(6):
                least[k] = numbers[k]
        copy_matrix(bases[c], bases[kept])
        adjugate(bases[c], inverses[kept])
        kept += 1
    return kept


@kernel
def prepare(
    cells: Floats,
    offsets: Ints,
    positions: Floats,
    species: Codes,
    overlap_distance: float,
    epsilon: float,
    outcome: Ints,
    detail: Floats,
    hands: Ints,
    matrices: Ints,
    reduced: Floats,
    x: Floats,
    kinds: Ints,
    order: Ints,
) -> None:
    """Given crystals on their own Niggli-reduced lattice; input as in CrystalBatch, output into the arrays given.

    outcome (n,) int64: DONE or why not. detail (n, 3): for OVERLAP the two sites, from 0, and their distance
    (angstrom). For crystals that are DONE: hands (n,) int64, +1, or -1 where the basis is left-handed and was negated;
    matrices M (n, 3, 3) int64, det +1, with reduced = hand M cell; reduced (n, 3, 3); x (m, 3) positions in the reduced
    cell, in [0, 1); kinds (m,) int64 ranks of the species, ascending, the rarest first; order (m,) int64: the given
    site, from 0 a crystal, that each of these stands for.
    """
    cell = np.empty((3, 3))
    inverse = np.empty((3, 3), np.int64)
    for i in range(len(outcome)):
        a, b = offsets[i], offsets[i + 1]
        outcome[i] = DONE
        edges = 1.0
        for r in range(3):
            for k in range(3):
                cell[r, k] = cells[i, r, k]
            edges *= np.sqrt(row_dot(cell, r, cell, r))
        v = volume(cell)
        if a == b:
            outcome[i] = NO_SITES
        elif not (np.isfinite(edges) and np.isfinite(v)):
            outcome[i] = CELL_ABSURD
        elif abs(v) <= ZERO_VOLUME * edges:
            outcome[i] = CELL_ZERO
        elif abs(v) <= FLAT_VOLUME * edges:
            outcome[i] = CELL_ABSURD
        for j in range(a, b):
            for k in range(3):
                if not abs(positions[j, k]) < FARTHEST:
                    outcome[i] = NOT_FINITE
        if outcome[i] != DONE:
            continue
        # A left-handed basis is turned over: the lattice and the crystal stay as they are, no mirror is applied.
        hand = 1 if v > 0 else -1
        hands[i] = hand
        for r in range(3):
            for k in range(3):
                cell[r, k] *= hand
        if rank_species(species[a:b], kinds[a:b], order[a:b]) > MOST_KINDS:
            outcome[i] = TOO_MANY_KINDS
            continue
        if reduce_cell(cell, epsilon, matrices[i]) == 0.0:
            outcome[i] = NOT_REDUCED
            continue
        transform(matrices[i], cell, reduced[i])
        adjugate(matrices[i], inverse)
        for s in range(a, b):
            for k in range(3):
                x[s, k] = wrapped(hand * through(positions, a + order[s], inverse, k))
        first, second, distance = closest_overlap(reduced[i], x[a:b], overlap_distance)
        if first >= 0:
            outcome[i] = OVERLAP
            detail[i, 0] = min(order[a + first], order[a + second])
            detail[i, 1] = max(order[a + first], order[a + second])
            detail[i, 2] = distance


@kernel
def describe(
    offsets: Ints,
    primitive: Floats,
    sites: Ints,
    x: Floats,
    kinds: Ints,
    epsilon: float,
    outcome: Ints,
    levels: Floats,
    last: Ints,
    origin: Floats,
    positions: Floats,
    place: Ints,
) -> None:
    """The smallest description of each primitive crystal whose outcome is DONE.

    primitive (n, 3, 3) Niggli-reduced cells, sites (n,) their numbers of sites, x (m, 3) and kinds (m,) as
    primitive_crystals left them. Filled: outcome, NOT_REDUCED where the reduced bases cannot be listed; levels (n,)
    float64, the tolerance at which the canonical cell is Niggli-reduced (niggli.py); last
    M (n, 3, 3) int64, det +1: canonical vectors W = M primitive; origin (n, 3), fractional in W; positions (m, 3),
    canonical sites in order from offsets[i] on; place (m,) int64: where each site of x went, from 0 a crystal.
    """
    bases = np.empty((MOST_BASES, 3, 3), np.int64)
    inverses = np.empty((MOST_BASES, 3, 3), np.int64)
    for i in range(len(outcome)):
        if outcome[i] != DONE:
            continue
        a = offsets[i]
        b = a + sites[i]
        # The first level at which the lattice has reduced bases: a property of the lattice, not of the cell given.
        levels[i] = epsilon
        count = reduced_bases(primitive[i], epsilon, bases)
        for _ in range(1, LEVELS):
            if count != 0:
                break
            levels[i] *= LEVEL_STEP
            count = reduced_bases(primitive[i], levels[i], bases)
        if count <= 0:
            outcome[i] = NOT_REDUCED
            continue
        kept = smallest_metrics(primitive[i], sites[i], bases, count, inverses)
        order = np.empty(sites[i], np.int64)
        best, best_origin = smallest_description(x[a:b], kinds[a:b], inverses, kept, order)
        copy_matrix(bases[best], last[i])
        for k in range(3):
            origin[i, k] = through(x, a + best_origin, inverses[best], k)
        for r in range(sites[i]):
            s = order[r]
            place[a + s] = r
            for k in range(3):
                f = through(x, a + s, inverses[best], k) - origin[i, k]
                # Into [-phi / N, 1 - phi / N), the range of the grid numbers.
                positions[a + r, k] = f - np.floor((f * GRID + GRID_OFFSET) / GRID)


@kernel
def compose(
    cells: Floats,
    offsets: Ints,
    outcome: Ints,
    hands: Ints,
    matrices: Ints,
    order: Ints,
    division: Ints,
    index: Ints,
    primitive_map: Ints,
    last: Ints,
    place: Ints,
    species: Codes,
    multiplicity: Ints,
    frames: Floats,
    site_map: Codes,
    new_species: Codes,
) -> None:
    """How the given crystals follow from the canonical ones, from what the three stages noted.

    Filled for crystals that are DONE: multiplicity K (n, 3, 3) int64 and frames W (n, 3, 3), the canonical vectors in
    the given Cartesian frame, with given cell = K W; site_map (m,) int32: the canonical site, from 0 a crystal, of each
    given site; new_species (m,) int32 from offsets[i] on.
    """
    inverse = np.empty((3, 3), np.int64)
    first = np.empty((3, 3), np.int64)
    for i in range(len(outcome)):
        if outcome[i] != DONE:
            continue
        # hand cell = M^-1 reduced, reduced = division primitive, primitive = last^-1 W.
        adjugate(matrices[i], inverse)
        multiply(inverse, division[i], first)
        adjugate(last[i], inverse)
        multiply(first, inverse, multiplicity[i])
        for r in range(3):
            for k in range(3):
                multiplicity[i, r, k] *= hands[i]
        adjugate(multiplicity[i], inverse)  # det K = hand index.
        transform(inverse, cells[i], frames[i])
        for r in range(3):
            for k in range(3):
                frames[i, r, k] /= hands[i] * index[i]
        a = offsets[i]
        for s in range(a, offsets[i + 1]):
            r = place[a + primitive_map[s]]
            site_map[a + order[s]] = r
            new_species[a + r] = species[a + order[s]]


@dataclass(frozen=True, slots=True)
class CanonicalColumns:
    """What `canonical_columns` found for n crystals with m sites; rows whose outcome is not DONE hold nothing of
    use.
    """

    outcome: Ints
    """(n,) int64: DONE or why not."""
    detail: Floats
    """(n, 3): for OVERLAP the two given sites, from 0, and their distance (angstrom)."""
    levels: Floats
    """(n,) float64: tolerance, at cell volume 1, at which the canonical cell is Niggli-reduced."""
    sites: Ints
    """(n,) int64: sites of the canonical crystal."""
    frames: Floats
    """W (n, 3, 3): the canonical vectors in the given Cartesian frame, right-handed."""
    multiplicity: Ints
    """K (n, 3, 3) int64: given cell = K W."""
    origin: Floats
    """(n, 3) fractional in W."""
    positions: Floats
    """(m, 3) fractional in W: the canonical sites of crystal i stand from offsets[i] on."""
    species: Codes
    """(m,) int32: their species."""
    site_map: Codes
    """(m,) int32: the canonical site, from 0 a crystal, of each given site."""
    thirds: Floats
    """(n,) angstrom: length of the third reduced row, which the third coordinates of layers refer to."""


def canonical_columns(
    cells: Floats, offsets: Ints, positions: Floats, species: Codes,
    exact_tolerance: float, overlap_distance: float, epsilon: float, layers: NDArray[np.bool_] | None = None,
) -> CanonicalColumns:  # fmt: skip
    """Run the stages over a batch; the first four arguments as in CrystalBatch, lengths in angstrom.

    layers (n,): crystals that are layers in the close frame (lattice/layer.py) of the cell they are given in, their
    slab around the middle of the third row. They are described in the close frame of their primitive cell; frames and
    multiplicity are those of the third row that came in, positions and origin those of the other.
    """
    n, m = len(cells), len(species)
    outcome, index = np.empty(n, np.int64), np.ones(n, np.int64)
    detail, residual = np.zeros((n, 3)), np.empty(n)
    hands, matrices = np.empty(n, np.int64), np.empty((n, 3, 3), np.int64)
    reduced, x = np.zeros((n, 3, 3)), np.empty((m, 3))
    kinds, order = np.empty(m, np.int64), np.empty(m, np.int64)
    prepare(
        cells, offsets, positions, species, overlap_distance, epsilon,
        outcome, detail, hands, matrices, reduced, x, kinds, order,
    )  # fmt: skip
    division, primitive_map = np.empty((n, 3, 3), np.int64), np.empty(m, np.int64)
    todo = (outcome == DONE).astype(np.int64)
    own_offsets = np.array(offsets)
    primitive_crystals(
        todo, reduced, own_offsets, x, kinds, exact_tolerance, epsilon, index, division, residual, primitive_map
    )
    outcome[index == 0] = NOT_REDUCED
    sites = np.diff(own_offsets) // np.maximum(index, 1)
    if layers is not None and layers.any():
        close_again(layers & (outcome == DONE), reduced, own_offsets, sites, x)
    last, place = np.empty((n, 3, 3), np.int64), np.empty(m, np.int64)
    origin, new_positions = np.empty((n, 3)), np.empty((m, 3))
    levels = np.ones(n)
    describe(own_offsets, reduced, sites, x, kinds, epsilon, outcome, levels, last, origin, new_positions, place)
    multiplicity, frames = np.empty((n, 3, 3), np.int64), np.empty((n, 3, 3))
    site_map, new_species = np.empty(m, np.int32), np.empty(m, np.int32)
    compose(
        cells, own_offsets, outcome, hands, matrices, order, division, index, primitive_map, last, place, species,
        multiplicity, frames, site_map, new_species,
    )  # fmt: skip
    return CanonicalColumns(
        outcome, detail, levels, sites, frames, multiplicity, origin, new_positions, new_species, site_map,
        np.linalg.norm(reduced[:, 2], axis=1),
    )  # fmt: skip


def close_again(layers: NDArray[np.bool_], cells: Floats, offsets: Ints, sites: Ints, x: Floats) -> None:
    """Bring primitive layers, (n,) bool, to the close frame of their own plane lattice, in place.

    cells (n, 3, 3), sites (n,) and x (m, 3) as primitive_crystals left them: the slab lies around x = 1/2.
    """
    rows = np.flatnonzero(layers)
    if not len(rows):
        return
    ends = np.cumsum(sites[rows])
    index = np.repeat(offsets[rows] - (ends - sites[rows]), sites[rows]) + np.arange(ends[-1])
    inner_offsets = np.concatenate([[0], ends]).astype(np.int64)
    old, place = cells[rows], x[index]
    place[:, 2] -= 0.5
    height = place[:, 2] * np.repeat(np.linalg.norm(old[:, 2], axis=1), sites[rows])
    lengths = close_lengths(old, spread(height, inner_offsets))
    cells[rows], place = with_third_row(old, place, inner_offsets, lengths)
    place[:, 2] += 0.5
    x[index] = place


def warm_up() -> None:
    """Compile the kernels that are called from Python, for read-only input as batches have it."""
    cells, offsets = np.eye(3)[None] * 4.0, np.array([0, 2])
    positions, species = np.array([[0.0, 0.0, 0.0], [0.5, 0.5, 0.5]]), np.zeros(2, np.int32)
    for array in (cells, offsets, positions, species):
        array.flags.writeable = False
    canonical_columns(cells, offsets, positions, species, 0.001, 0.5, 1e-5)
