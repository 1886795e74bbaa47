"""Kept and set-aside structure in one frame, through the stored witness: what a picture of the two is drawn from.

NumPy alone, no kernels: the equations are those of grouping/witness.py, put to the canonical forms of the two records.
Read-only.
"""

from __future__ import annotations

from dataclasses import dataclass

import duckdb
import numpy as np

from ..model.batch import Floats, Ints
from ..store.rows import one_row
from .common_sites import common_sites
from .pair_sides import Side, side_of

ROOM = 3.0
"""angstrom above and below a layer in the cell that it is drawn in."""

EDGE = 0.02
"""A site this close (fraction) to a face of the cell is drawn at the opposite face too."""


@dataclass(frozen=True, slots=True)
class Overlay:
    """Two records in their common cell, n sites each; Cartesian rows in the frame of `cell`."""

    kept: Side
    aside: Side

    cell: Floats
    """C (3, 3), angstrom, rows: the mean of the matched cells, C C^T = G = (G_A + G_B) / 2."""

    sites: Floats
    """(n, 3): sites of the kept record, fractions of C in [0, 1)."""

    delta: Floats
    """(n, 3): from each site of the kept record to its partner, fractions of C; adds up to zero."""

    tokens: list[str]
    """(n,)"""

    largest_shift: float
    """As `matches` or the equal keys have it, angstrom."""

    rms_shift: float
    strain: float
    volume_ratio: float
    reason: str
    mirrored: bool

    @property
    def distances(self) -> Floats:
        """(n,): |delta C|, which is the distance in the mean metric, angstrom."""
        return np.asarray(np.linalg.norm(self.delta @ self.cell, axis=1), dtype=np.float64)

    @property
    def axis(self) -> int:
        """The axis of the cell (0, 1, 2) that it is best looked at along."""
        return best_axis(self.cell, self.sites, self.delta)


def overlay(connection: duckdb.DuckDBPyConnection, kept: str, aside: str) -> Overlay | None:
    """The two records in their common cell; None where neither equal keys nor a stored match join them."""
    a, b = side_of(connection, kept), side_of(connection, aside)
    if a.crystal_key == b.crystal_key:
        one = np.eye(3, dtype=np.int64)
        pairing = np.arange(len(a.tokens))
        sites, delta = paired(a.positions, b.positions, one, one, np.zeros(3), pairing)
        cell, sites, delta = drawn(mean_cell(a.cell, b.cell), sites, delta, a.periodicity)
        reason = _reason_of_equal_keys(connection, a.record_id, b.record_id)
        return Overlay(a, b, cell, sites, delta, a.tokens, 0.0, 0.0, 0.0, 1.0, reason, False)
    row = one_row(
        connection,
        "SELECT crystal_key_a = $1, p_matrix, q_matrix, orthogonal, shift_fractional, pairing, largest_shift_angstrom, "
        "rms_shift_angstrom, strain, volume_ratio, reason, mirrored FROM matches "
        "WHERE (crystal_key_a = $1 AND crystal_key_b = $2) OR (crystal_key_a = $2 AND crystal_key_b = $1)",
        [a.crystal_key, b.crystal_key],
    )
    if row is None:
        return None
    forward, p, q, orthogonal, shift, pairing = row[:6]
    first, second = (a, b) if forward else (b, a)
    p, q = (np.array(m, np.int64).reshape(3, 3) for m in (p, q))
    first_cell, second_cell = p @ first.cell, q @ second.cell @ np.array(orthogonal, np.float64).reshape(3, 3).T
    sites, delta = paired(first.positions, second.positions, p, q, np.array(shift), np.array(pairing, np.int64))
    tokens = [t for t in first.tokens for _ in range(len(sites) // len(first.tokens))]
    if not forward:
        sites, delta = sites + delta, -delta
    sites = sites - np.floor(sites + 1e-9)
    cell, sites, delta = drawn(mean_cell(first_cell, second_cell), sites, delta, a.periodicity)
    return Overlay(a, b, cell, sites, delta, tokens, *row[6:])


def drawn(cell: Floats, sites: Floats, delta: Floats, periodicity: int) -> tuple[Floats, Floats, Floats]:
    """Cell, sites and delta as they are drawn: those of a layer with a third row ROOM longer on both sides than it is
    thick, not that of its frame; of a bulk crystal as they are."""
    if periodicity == 3:
        return cell, sites, delta
    third = float(np.linalg.norm(cell[2]))
    heights = (sites[:, 2] - np.rint(sites[:, 2])) * third
    length = float(np.ptp(heights)) + 2 * ROOM
    cell, sites, delta = cell.copy(), sites.copy(), delta.copy()
    cell[2] *= length / third
    sites[:, 2] = (heights - heights.min() + ROOM) / length
    delta[:, 2] *= third / length
    return cell, sites, delta


def _reason_of_equal_keys(connection: duckdb.DuckDBPyConnection, a: str, b: str) -> str:
    row = one_row(
        connection,
        "SELECT equal_key_reason(r.content_hash, s.content_hash, f.supercell_index, g.supercell_index, "
        "v.cell_angstrom, w.cell_angstrom) FROM records r JOIN canonical_forms f USING (record_id) "
        "JOIN structures v USING (record_id), records s JOIN canonical_forms g USING (record_id) "
        "JOIN structures w USING (record_id) WHERE r.record_id = $1 AND s.record_id = $2",
        [a, b],
    )
    assert row is not None  # both were read before
    return str(row[0])


def paired(
    first: Floats, second: Floats, p: Ints, q: Ints, shift: Floats, pairing: Ints
) -> tuple[Floats, Floats]:  # fmt: skip
    """Sites (n, 3) of the first in the common cell, and delta (n, 3) to their partners, both fractions of it."""
    (u, _), (v, _) = common_sites(first, p), common_sites(second, q)
    delta = v[pairing] - u - shift
    delta -= np.rint(delta)
    return u - np.floor(u + 1e-9), delta - delta.mean(axis=0)


def mean_cell(first: Floats, second: Floats) -> Floats:
    """C with C C^T = (A A^T + B B^T) / 2, turned as near as can be to (A + B) / 2, so that lengths in it are measures.

    Any such C is L R with the Cholesky factor L and R orthogonal; the nearest to M is given by the orthogonal polar
    factor of L^-1 M (Higham 1986).
    """
    factor = np.linalg.cholesky((first @ first.T + second @ second.T) / 2)
    left, _, right = np.linalg.svd(factor.T @ ((first + second) / 2))
    return np.asarray(factor @ left @ right, dtype=np.float64)


def plane_along(cell: Floats, axis: int) -> Floats:
    """(2, 3) orthonormal rows across an axis of the cell: the next axis lies along the first row."""
    along = cell[axis] / np.linalg.norm(cell[axis])
    across = cell[(axis + 1) % 3] - (cell[(axis + 1) % 3] @ along) * along
    across = across / np.linalg.norm(across)
    return np.stack([across, np.cross(along, across)])


def best_axis(cell: Floats, sites: Floats, delta: Floats) -> int:
    """The axis along which most is seen: the share of the shifts that lies across it, times the share of sites that do
    not hide one another; the first of equal ones."""
    scores = []
    moved = delta @ cell
    whole = float(np.linalg.norm(moved))
    for axis in range(3):
        plane = plane_along(cell, axis)
        seen = 1.0 if whole < 1e-6 else float(np.linalg.norm(moved @ plane.T)) / whole
        places = np.delete(sites, axis, axis=1)
        different = len(np.unique(np.round(places * 50).astype(np.int64) % 50, axis=0)) / len(sites)
        scores.append(round(seen * (0.25 + 0.75 * different), 6))
    return int(np.argmax(scores))


def with_images(sites: Floats) -> tuple[Floats, Ints]:
    """Sites, and those near a face at the opposite one too, fractions (m, 3); and which site each is, (m,)."""
    all_sites, which = [sites], [np.arange(len(sites))]
    for i in range(3):
        now, at = np.concatenate(all_sites), np.concatenate(which)
        for near, step in ((now[:, i] < EDGE, 1.0), (now[:, i] > 1 - EDGE, -1.0)):
            image = now[near].copy()
            image[:, i] += step
            all_sites.append(image)
            which.append(at[near])
    return np.concatenate(all_sites), np.concatenate(which)
