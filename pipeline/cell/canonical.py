"""The canonical form of crystals: primitive, reduced, sorted, with a key and the way back to what was given.

Steps: reduce the given lattice; refuse overlapping sites; divide out the exact translations; take, among all
Niggli-reduced right-handed bases and all origins on the rarest species, the smallest description on integers; look for
approximate translations of the result. The steps are in kernels/; here they are put together and checked.

Layers go through the same steps in their close frame (lattice/layer.py) and come out in the wide one: cells with the
third row (0, 0, FRAME), and heights above the first site over FRAME as third coordinates.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from ..errors import UsageError
from ..kernels import canonical as kernel
from ..kernels.ordering import MOST_KINDS
from ..kernels.translations import approximate_translations
from ..lattice.layer import close_layers
from ..lattice.metric import lower_triangular
from ..model.batch import Codes, CrystalBatch, Floats, Ints, select
from ..model.refusals import Refusal
from ..tolerances import NIGGLI_EPSILON, Tolerances
from .key import crystal_keys, species_ranks
from .layer_form import are_reduced, given_frames, origins, wide_layers


@dataclass(frozen=True, slots=True)
class CanonicalBatch:
    """Canonical crystals of a batch and how the given ones are recovered. n crystals are accepted, with m given sites.

    For each crystal, with K = multiplicity_matrix, R = rotation and L = canonical cell:

        given_cell = K L R
        given_position[j] K = canonical_position[site_map[j]] + site_shift[j] + origin + (a deviation)

    so that the Cartesian given_position[j] given_cell equals (canonical_position[site_map[j]] + site_shift[j] + origin)
    L R up to `residual` angstrom. Arrays are read-only.

    A layer's third row is no period. With w_j the third number of site_shift[j], the equations hold for the given layer
    put upright: its cell U has the rows a and b as given and FRAME angstrom along the normal on the side of c, its
    positions are (given_position[j] - (0, 0, w_j)) given_cell U^-1, and the third number of site_shift is taken for 0.
    """

    rows: Ints
    """(n,) int64: the row of the input batch of each accepted crystal, ascending."""

    refusals: tuple[tuple[int, Refusal], ...]
    """(input row, refusal), ascending; every input row is either here or in `rows`."""

    crystals: CrystalBatch
    """The n canonical crystals: cells lower triangular with positive diagonal, Niggli-reduced; sites sorted by species
    (rarest first, then by token) and position, the first at the origin; positions in [-phi/N, 1 - phi/N). Layers: the
    plane reduced (lattice/layer.py, is_plane_reduced), the third row (0, 0, FRAME), the third coordinates in
    (-1/2, 1/2) and the sites in the order of the close frame."""

    crystal_key: tuple[str, ...]
    """n keys of 64 hex digits (key.py)."""

    multiplicity_matrix: Ints
    """K (n, 3, 3) int64. det K < 0 where the given basis is left-handed."""

    supercell_index: Ints
    """(n,) int64: |det K|, primitive cells per given cell."""

    rotation: Floats
    """R (n, 3, 3) float64, proper orthogonal; row vectors in the canonical frame times R stand in the given frame."""

    origin: Floats
    """(n, 3) float64, fractional in the canonical cell: where the canonical origin lies in the given crystal."""

    residual: Floats
    """(n,) float64, angstrom: largest distance of a given site from where the canonical crystal puts it."""

    given_offsets: Ints
    """(n + 1,) int64: where the given sites of each accepted crystal begin in site_map and site_shift."""

    site_map: Codes
    """(m,) int32: the site, from 0 within its canonical crystal, that each given site is an image of."""

    site_shift: Codes
    """(m, 3) int32: lattice translation, in the canonical cell, from that site to the given one; the third number of a
    layer's counts given third rows (see above)."""

    pseudo_index: Ints
    """(n,) int64: cells of the approximate translation lattice per canonical cell; 1 where there is none."""

    pseudo_matrix: Ints
    """H (n, 3, 3) int64 in column Hermite form, det H = pseudo_index: canonical_cell = H pseudo_cell, so the rows of
    inv(H) are the basis of the approximate translation lattice in fractions of the canonical cell."""

    pseudo_residual: Floats
    """(n,) float64, angstrom: largest distance of a canonical site from the mean of its approximate images."""

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                array = np.ascontiguousarray(value).view()
                array.flags.writeable = False
                object.__setattr__(self, field.name, array)

    def __len__(self) -> int:
        return len(self.rows)


_MESSAGES = {
    kernel.CELL_ABSURD: ("cell_absurd", "the cell has vectors that are not finite, or is too flat to be reduced"),
    kernel.CELL_ZERO: ("cell_zero", "the three cell vectors span no volume"),
    kernel.NOT_REDUCED: ("reduction_failed", "the cell reduction did not come to an end"),
    kernel.NO_SITES: ("sites_missing", "the record has no sites"),
    kernel.NOT_FINITE: ("coordinates_nonfinite", "a coordinate is not finite or lies absurdly far outside the cell"),
    kernel.TOO_MANY_KINDS: ("sites_too_many", f"more than {MOST_KINDS} different species in one crystal"),
}


def _refusal(outcome: int, detail: Floats) -> Refusal:
    if outcome == kernel.OVERLAP:
        first, second, distance = int(detail[0]) + 1, int(detail[1]) + 1, float(detail[2])
        pair = f"sites {first} and {second}" if first != second else f"site {first} and its own periodic image"
        return Refusal("sites_overlap", f"{pair} are {distance:.3f} angstrom apart", "canonical")
    reason, message = _MESSAGES[outcome]
    return Refusal(reason, message, "canonical")


def canonicalise(batch: CrystalBatch, tolerances: Tolerances) -> CanonicalBatch:
    """Canonical crystals of a batch in any basis, handedness, origin, order and orientation.

    A record that has none is refused: sites_overlap, cell_zero, cell_absurd, coordinates_nonfinite, sites_missing,
    reduction_failed; layer_unclear; periodicity_unsupported for fewer than two periods. Never raises for a bad record.
    Raises UsageError where the tolerances contradict each other: the image of a site under an approximate translation
    must be unique.
    """
    widest = max(tolerances.exact_tolerance, tolerances.primitive_tolerance)
    if not 0 < 4 * widest < tolerances.overlap_distance:
        raise UsageError(
            f"exact_tolerance and primitive_tolerance must be above 0 and below a quarter of overlap_distance "
            f"({tolerances.overlap_distance} angstrom); the larger is {widest}"
        )
    n = len(batch)
    layers = batch.periodicity == 2
    framed = given_frames(batch)
    found = kernel.canonical_columns(
        framed.close.cells, batch.offsets, framed.close.positions, batch.species,
        tolerances.exact_tolerance, tolerances.overlap_distance, NIGGLI_EPSILON, layers,
    )  # fmt: skip
    refused: dict[int, Refusal] = {
        int(i): _refusal(int(found.outcome[i]), found.detail[i]) for i in np.flatnonzero(found.outcome != kernel.DONE)
    }
    refused |= {i: r for i, r in framed.refusals.items() if found.outcome[i] not in kernel.BROKEN}
    for i in np.flatnonzero((batch.periodicity != 3) & ~layers):
        refused[int(i)] = Refusal(
            "periodicity_unsupported", f"periodic in {int(batch.periodicity[i])} directions, not in 2 or 3", "canonical"
        )
    accepted = np.ones(n, bool)
    accepted[list(refused)] = False
    rows = np.flatnonzero(accepted)
    cells, rotation = lower_triangular(found.frames[rows])
    counts = found.sites[rows]
    crystals = wide_layers(
        _crystals(batch, rows, cells, counts, found.positions, found.species), found.thirds[rows]
    )  # fmt: skip
    reduced = are_reduced(crystals, found.levels[rows], found.multiplicity[rows])
    for i in rows[~reduced]:
        refused[int(i)] = Refusal(
            "reduction_failed", "the reduced cell does not satisfy the conditions of a Niggli cell", "canonical"
        )
    if not reduced.all():
        rows, rotation, counts = rows[reduced], rotation[reduced], counts[reduced]
        crystals = select(crystals, np.flatnonzero(reduced))

    given_counts = np.diff(batch.offsets)[rows]
    given_offsets = np.concatenate([[0], np.cumsum(given_counts)]).astype(np.int64)
    given = _ranges(batch.offsets[rows], given_counts)
    multiplicity, site_map = found.multiplicity[rows], found.site_map[given]
    positions = framed.positions[given]
    origin = origins(positions, site_map, given_offsets, crystals, multiplicity, found.origin[rows])
    shift, residual = _way_back(positions, site_map, given_offsets, crystals, multiplicity, origin)
    if framed.turns is not None:
        shift[:, 2] += framed.turns[given].astype(np.int32)
    packed = close_layers(crystals)
    pseudo_index, pseudo_matrix, pseudo_residual = approximate_translations(
        packed.cells, packed.offsets, packed.positions, species_ranks(packed),
        tolerances.primitive_tolerance, NIGGLI_EPSILON,
    )  # fmt: skip
    return CanonicalBatch(
        rows=rows,
        refusals=tuple(sorted(refused.items())),
        crystals=crystals,
        crystal_key=tuple(crystal_keys(crystals)),
        multiplicity_matrix=multiplicity,
        supercell_index=given_counts // np.maximum(counts, 1),
        rotation=rotation,
        origin=origin,
        residual=residual,
        given_offsets=given_offsets,
        site_map=site_map,
        site_shift=shift,
        pseudo_index=pseudo_index,
        pseudo_matrix=pseudo_matrix,
        pseudo_residual=pseudo_residual,
    )


def _ranges(starts: Ints, counts: Ints) -> NDArray[np.int64]:
    """Concatenated ranges starts[i] .. starts[i] + counts[i]."""
    ends = np.cumsum(counts)
    total = int(ends[-1]) if len(ends) else 0
    return np.repeat(starts - (ends - counts), counts) + np.arange(total)


def _crystals(
    batch: CrystalBatch, rows: Ints, cells: Floats, counts: Ints, positions: Floats, species: Codes
) -> CrystalBatch:
    index = _ranges(batch.offsets[rows], counts)
    offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    return CrystalBatch(cells, offsets, positions[index], species[index], batch.tokens, batch.periodicity[rows])


def _way_back(
    given: Floats, site_map: Codes, given_offsets: Ints, crystals: CrystalBatch, multiplicity: Ints, origin: Floats
) -> tuple[Codes, Floats]:
    """Lattice translations (m, 3) int32 of the given sites, and the largest deviation (n,) angstrom of each crystal."""
    crystal = np.repeat(np.arange(len(crystals)), np.diff(given_offsets))
    place = np.einsum("mi,mij->mj", given, multiplicity[crystal].astype(np.float64)) - origin[crystal]
    place -= crystals.positions[crystals.offsets[crystal] + site_map]
    shift = np.rint(place)
    deviation = np.linalg.norm(np.einsum("mi,mij->mj", place - shift, crystals.cells[crystal]), axis=1)
    residual = np.maximum.reduceat(deviation, given_offsets[:-1]) if len(crystals) else np.zeros(0)
    return shift.astype(np.int32), residual
