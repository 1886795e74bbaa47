"""The match of two records, verified on demand, with everything that a referee needs to compute it again.

The equations are those of grouping/witness.py. This module imports kernels: only `witness` needs it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..errors import NumericsError
from ..grouping.preparation import prepare
from ..grouping.reasons import reasons
from ..grouping.verification import NO_MATCH, verify
from ..grouping.window import Window
from ..grouping.witness import witnesses
from ..model.batch import CrystalBatch, batch_from_lists
from .common_sites import common_sites
from .pair_sides import Side

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

GRADES = ("same", "near", "window")


@dataclass(frozen=True, slots=True)
class PairMatch:
    """A match of record A with record B. n sites in the common cell."""

    grade: str | None
    """copy, key, same, near, or window (just outside near); None where mirror images are kept apart and only the
    mirror image matches."""

    reason: str
    """A key of grouping/reasons.py REASONS."""

    largest_shift: float
    """Angstrom."""

    rms_shift: float
    """Angstrom."""

    strain: float
    shape_strain: float
    volume_ratio: float

    larger: str | None
    """`a` or `b`: which has the larger volume per site; None where they are equal."""

    mirrored: bool
    """Only an improper match reaches the grade."""

    improper: bool
    """This match turns A into the mirror image of B."""

    p_matrix: Ints
    """(3, 3)"""

    q_matrix: Ints
    """(3, 3)"""

    orthogonal: Floats
    """O (3, 3): row vectors in the frame of A's reduced cell times O stand in that of B's."""

    stretches: Floats
    """(3,): principal stretches, ascending."""

    shift: Floats
    """(3,): origin shift, fractions of the common cell."""

    pairing: Ints
    """(n,): for each site of A in the common cell the one of B, from 0."""

    first_cell: Floats
    """(3, 3): P A, angstrom, rows, frame of A's reduced cell."""

    second_cell: Floats
    """(3, 3): Q B in the frame of B's reduced cell."""

    first_sites: Floats
    """(n, 3): u, fractions of P A."""

    second_sites: Floats
    """(n, 3): v, fractions of Q B."""

    first_of: Ints
    """(n,): reduced site of A that each site of the common cell is an image of, from 0."""

    second_of: Ints
    """(n,): likewise for B."""

    delta: Floats
    """(n, 3): what is left between paired sites, fractions of the common cell; adds up to zero."""

    distances: Floats
    """(n,): length of delta in the mean metric, angstrom."""

    def as_json(self) -> dict[str, Any]:
        """All of it, ready for json.dumps; matrices as rows, sites from 0."""
        return {
            "grade": self.grade,
            "reason": self.reason,
            "largest_shift_angstrom": self.largest_shift,
            "rms_shift_angstrom": self.rms_shift,
            "strain": self.strain,
            "shape_strain": self.shape_strain,
            "volume_ratio": self.volume_ratio,
            "larger": self.larger,
            "mirrored": self.mirrored,
            "improper": self.improper,
            "p_matrix": self.p_matrix.tolist(),
            "q_matrix": self.q_matrix.tolist(),
            "orthogonal": self.orthogonal.tolist(),
            "stretches": self.stretches.tolist(),
            "shift_fractional": self.shift.tolist(),
            "pairing": self.pairing.tolist(),
            "common_cell": {
                "a_cell_angstrom": self.first_cell.tolist(),
                "b_cell_angstrom": self.second_cell.tolist(),
                "a_positions_fractional": self.first_sites.tolist(),
                "b_positions_fractional": self.second_sites.tolist(),
                "a_reduced_site": self.first_of.tolist(),
                "b_reduced_site": self.second_of.tolist(),
                "delta_fractional": self.delta.tolist(),
                "distances_angstrom": self.distances.tolist(),
            },
        }


def batch_of(a: Side, b: Side) -> CrystalBatch:
    """The two reduced crystals as a batch."""
    batch = batch_from_lists([a.cell, b.cell], [a.positions, b.positions], [a.tokens, b.tokens])
    return replace(batch, periodicity=np.array([a.periodicity, b.periodicity], np.uint8))


def match_of(a: Side, b: Side, window: Window, mirror_images: str, strain_limit: float) -> PairMatch | None:
    """The recorded match of two records of one composition in a window, or None.

    strain_limit: what two given cells may differ by to count as one (grouping/reasons.py). Raises NumericsError where
    equal keys do not match, which would be a bug.
    """
    batch = batch_of(a, b)
    prepared = prepare(batch, window)
    found = verify(prepared, np.array([[0, 1]], np.int64), window, mirror_images)
    one_key = a.crystal_key == b.crystal_key
    if found.grade[0] >= NO_MATCH:
        if one_key:
            raise NumericsError(f"Records {a.record_id} and {b.record_id} have one key, but no match was found.")
        return None
    witness = witnesses(prepared, found, window)
    p, q = found.p_matrix[0], found.q_matrix[0]
    first_cell, second_cell = p @ a.cell, q @ b.cell
    u, first_of = common_sites(a.positions, p)
    v, second_of = common_sites(b.positions, q)
    delta = v[witness.pairing] - u - found.shift[0]
    delta -= np.rint(delta)
    metric = (first_cell @ first_cell.T + second_cell @ second_cell.T) / 2
    if one_key:
        grade: str | None = "copy" if a.content_hash == b.content_hash else "key"
    else:
        reached = int((found.proper_grade if mirror_images == "separate" else found.grade)[0])
        grade = GRADES[reached] if reached < NO_MATCH else None
    why = reasons(
        a.cell[None], b.cell[None], a.matrix[None], b.matrix[None], p[None], q[None], found.mirrored,
        np.array([a.content_hash == b.content_hash]), strain_limit,
    )  # fmt: skip
    larger = int(found.larger[0])
    return PairMatch(
        grade=grade,
        reason=str(why[0]),
        largest_shift=float(found.largest_shift[0]),
        rms_shift=float(found.rms_shift[0]),
        strain=float(found.strain[0]),
        shape_strain=float(found.shape_strain[0]),
        volume_ratio=float(found.volume_ratio[0]),
        larger=None if larger < 0 else "ab"[larger],
        mirrored=bool(found.mirrored[0]),
        improper=bool(found.improper[0]),
        p_matrix=p,
        q_matrix=q,
        orthogonal=witness.orthogonal[0],
        stretches=np.sort(np.linalg.svd(np.linalg.solve(first_cell, second_cell), compute_uv=False)),
        shift=found.shift[0],
        pairing=witness.pairing,
        first_cell=first_cell,
        second_cell=second_cell,
        first_sites=u,
        second_sites=v,
        first_of=first_of,
        second_of=second_of,
        delta=delta,
        distances=np.sqrt(np.einsum("ni,ij,nj->n", delta, metric, delta)),
    )
