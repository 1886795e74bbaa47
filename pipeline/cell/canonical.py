"""The canonical form of crystals: primitive, reduced, sorted, with a key and the way back to what was given.

Steps: reduce the given lattice; refuse overlapping sites; divide out the exact translations; take, among all
Niggli-reduced right-handed bases and all origins on the rarest species, the smallest description on integers; look for
approximate translations of the result. The steps are in kernels/; here they are put together and checked.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from ..errors import UsageError
from ..kernels import canonical as kernel
from ..kernels.ordering import MOST_KINDS
from ..kernels.translations import approximate_translations
from ..lattice.metric import lower_triangular, metric
from ..lattice.niggli import is_niggli_reduced
from ..model.batch import Codes, CrystalBatch, Floats, Ints
from ..model.refusals import Refusal
from ..tolerances import NIGGLI_EPSILON, Tolerances
from .key import crystal_keys, species_ranks


@dataclass(frozen=True, slots=True)
class CanonicalBatch:
    """Canonical crystals of a batch and how the given ones are recovered. n crystals are accepted, with m given sites.

    For each crystal, with K = multiplicity_matrix, R = rotation and L = canonical cell:

        given_cell = K L R
        given_position[j] K = canonical_position[site_map[j]] + site_shift[j] + origin + (a deviation)

    so that the Cartesian given_position[j] given_cell equals (canonical_position[site_map[j]] + site_shift[j] + origin)
    L R up to `residual` angstrom. Arrays are read-only.
    """

    rows: Ints
    """(n,) int64: the row of the input batch of each accepted crystal, ascending."""

    refusals: tuple[tuple[int, Refusal], ...]
    """(input row, refusal), ascending; every input row is either here or in `rows`."""

    crystals: CrystalBatch
    """The n canonical crystals: cells lower triangular with positive diagonal, Niggli-reduced; sites sorted by species
    (rarest first, then by token) and position, the first at the origin; positions in [-phi/N, 1 - phi/N)."""

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
    """(m, 3) int32: lattice translation, in the canonical cell, from that site to the given one."""

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
    reduction_failed; periodicity_unsupported for layers. Never raises for a bad record. Raises UsageError where the
    tolerances contradict each other: the image of a site under an approximate translation must be unique.
    """
    widest = max(tolerances.exact_tolerance, tolerances.primitive_tolerance)
    if not 0 < 4 * widest < tolerances.overlap_distance:
        raise UsageError(
            f"exact_tolerance and primitive_tolerance must be above 0 and below a quarter of overlap_distance "
            f"({tolerances.overlap_distance} angstrom); the larger is {widest}"
        )
    n = len(batch)
    found = kernel.canonical_columns(
        batch.cells, batch.offsets, batch.positions, batch.species,
        tolerances.exact_tolerance, tolerances.overlap_distance, NIGGLI_EPSILON,
    )  # fmt: skip
    outcome = found.outcome
    refused: dict[int, Refusal] = {
        int(i): _refusal(int(outcome[i]), found.detail[i]) for i in np.flatnonzero(outcome != kernel.DONE)
    }
    for i in np.flatnonzero(batch.periodicity != 3):
        refused[int(i)] = Refusal(
            "periodicity_unsupported", f"periodic in {int(batch.periodicity[i])} directions, not in 3", "canonical"
        )
    accepted = np.ones(n, bool)
    accepted[list(refused)] = False
    rows = np.flatnonzero(accepted)
    cells, rotation = lower_triangular(found.frames[rows])
    reduced = is_niggli_reduced(metric(cells), found.levels[rows])
    for i in rows[~reduced]:
        refused[int(i)] = Refusal(
            "reduction_failed", "the reduced cell does not satisfy the conditions of a Niggli cell", "canonical"
        )
    rows, cells, rotation = rows[reduced], cells[reduced], rotation[reduced]

    counts = found.sites[rows]
    crystals = _crystals(batch, rows, cells, counts, found.positions, found.species)
    given_counts = np.diff(batch.offsets)[rows]
    given_offsets = np.concatenate([[0], np.cumsum(given_counts)]).astype(np.int64)
    given = _ranges(batch.offsets[rows], given_counts)
    shift, residual = _way_back(
        batch.positions[given],
        found.site_map[given],
        given_offsets,
        crystals,
        found.multiplicity[rows],
        found.origin[rows],
    )
    pseudo_index, pseudo_matrix, pseudo_residual = approximate_translations(
        crystals.cells, crystals.offsets, crystals.positions, species_ranks(crystals),
        tolerances.primitive_tolerance, NIGGLI_EPSILON,
    )  # fmt: skip
    return CanonicalBatch(
        rows=rows,
        refusals=tuple(sorted(refused.items())),
        crystals=crystals,
        crystal_key=tuple(crystal_keys(crystals)),
        multiplicity_matrix=found.multiplicity[rows],
        supercell_index=given_counts // np.maximum(counts, 1),
        rotation=rotation,
        origin=found.origin[rows],
        residual=residual,
        given_offsets=given_offsets,
        site_map=found.site_map[given],
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
