"""The audit of many witnesses of a store: of verified matches, and of records that are set aside for their key.

NumPy alone, by the equations that grouping/audit.py states; nothing of the matcher is imported.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb
import numpy as np

from ..grouping.audit import AGREEMENT, Claim, Given, audit, primitive_of
from ..store.rows import one_number
from ..tolerances import GRID

BATCH = 1000
"""Pairs whose structures are fetched at a time."""

STEPS = 2.0
"""Numbers of equal keys lie within one step of the grid; two are allowed, for the rounding of the way back."""


@dataclass(frozen=True, slots=True)
class Audited:
    """What an audit found."""

    failures: list[tuple[str, str, str]]
    """Two records, and what is wrong with what is said of them."""

    examined: int
    of: int


def audit_matches(connection: duckdb.DuckDBPyConnection, sample: int) -> Audited:
    """Audit up to `sample` rows of `matches` on the structures as they came. Read-only."""
    total = one_number(connection, "SELECT count(*) FROM matches")
    columns = (
        "record_a, record_b, p_matrix, q_matrix, orthogonal, shift_fractional, pairing, strain, shape_strain, "
        "largest_shift_angstrom, rms_shift_angstrom, volume_ratio, improper"
    )
    rows = connection.execute(
        f"SELECT {columns} FROM matches ORDER BY md5(record_a || record_b), record_a, record_b LIMIT ?", [sample]
    ).fetchall()
    failures = []
    for start in range(0, len(rows), BATCH):
        part = rows[start : start + BATCH]
        given = given_of(connection, {r for row in part for r in row[:2]})
        for a, b, *claimed in part:
            wrong = _missing(given, a, b) or _audit(given[a], given[b], claimed)
            if wrong:
                failures.append((a, b, "; ".join(wrong)))
    return Audited(sorted(failures), len(rows), total)


def audit_keys(connection: duckdb.DuckDBPyConnection, sample: int) -> Audited:
    """Audit up to `sample` records that are set aside at grade key against their kept ones. Read-only."""
    where = "FROM members WHERE grade = 'key' AND NOT kept"
    total = one_number(connection, f"SELECT count(*) {where}")
    rows = connection.execute(
        f"SELECT record_id, group_id {where} ORDER BY md5(record_id || group_id), record_id LIMIT ?", [sample]
    ).fetchall()
    failures = []
    for start in range(0, len(rows), BATCH):
        part = rows[start : start + BATCH]
        given = given_of(connection, {r for row in part for r in row})
        for a, b in part:
            wrong = _missing(given, a, b) or audit_equal(given[a], given[b])
            if wrong:
                failures.append((a, b, "; ".join(wrong)))
    return Audited(sorted(failures), len(rows), total)


def given_of(connection: duckdb.DuckDBPyConnection, records: set[str]) -> dict[str, Given]:
    """Structures as they came, with the way to their primitive crystals, by record id. Read-only."""
    rows = connection.execute(
        "SELECT s.record_id, s.cell_angstrom, s.positions_fractional, s.species, f.matrix, f.rotation, "
        "f.origin_fractional, f.site_map, f.site_shift, f.residual_angstrom, r.periodicity = 2 "
        "FROM (SELECT unnest($1) AS record_id) w JOIN structures s USING (record_id) "
        "JOIN canonical_forms f USING (record_id) JOIN records r USING (record_id)",
        [sorted(records)],
    ).fetchall()
    return {
        identity: Given(
            cell=np.array(cell).reshape(3, 3),
            positions=np.array(positions).reshape(-1, 3),
            tokens=list(species),
            matrix=np.array(matrix, np.int64).reshape(3, 3),
            rotation=np.array(rotation).reshape(3, 3),
            origin=np.array(origin),
            site_map=np.array(site_map, np.int64),
            site_shift=np.array(site_shift, np.int64).reshape(-1, 3),
            residual=float(residual),
            layer=bool(layer),
        )
        for identity, cell, positions, species, matrix, rotation, origin, site_map, site_shift, residual, layer in rows
    }


def _missing(given: dict[str, Given], *records: str) -> list[str]:
    return [f"record {r} has no structure" for r in records if r not in given]


def _audit(a: Given, b: Given, claimed: list[Any]) -> list[str]:
    p, q, orthogonal, shift, pairing, strain, shape_strain, largest, rms, ratio, improper = claimed
    claim = Claim(
        p_matrix=np.array(p, np.int64).reshape(3, 3),
        q_matrix=np.array(q, np.int64).reshape(3, 3),
        orthogonal=np.array(orthogonal).reshape(3, 3),
        shift=np.array(shift),
        pairing=np.array(pairing, np.int64),
        strain=strain,
        shape_strain=shape_strain,
        largest_shift=largest,
        rms_shift=rms,
        volume_ratio=ratio,
        improper=improper,
    )
    return audit(a, b, claim)


def audit_equal(a: Given, b: Given) -> list[str]:
    """What is wrong with the claim that two records have one canonical form: cells, species and sites in order."""
    failures: list[str] = []
    cell_a, x, tokens_a, _ = primitive_of(a, failures, "A")
    cell_b, y, tokens_b, _ = primitive_of(b, failures, "B")
    if failures:
        return failures
    if tokens_a != tokens_b:
        return ["the species of the canonical sites differ"]
    if a.layer != b.layer:
        return ["one of the two is a layer, the other is not"]
    if a.layer:
        cell_a, x = _close(cell_a, x)
        cell_b, y = _close(cell_b, y)
    # The key takes G / size^2 and size (cube root of the volume per site) in steps of 1 / GRID each.
    size = (abs(float(np.linalg.det(cell_a))) / len(x)) ** (1 / 3)
    first, second = cell_a @ cell_a.T, cell_b @ cell_b.T
    room = STEPS / GRID * (size**2 + 2 * float(np.abs(first).max()) / size) + AGREEMENT
    apart = float(np.abs(first - second).max())
    if apart > room:
        failures.append(f"the metrics of the canonical cells differ by {apart:.2e} square angstrom")
    delta = y - x
    delta -= np.rint(delta)
    largest = float(np.abs(delta).max())
    if largest > STEPS / GRID:
        failures.append(f"canonical sites differ by {largest:.2e} of an edge")
    return failures


def _close(cell: np.ndarray[Any, Any], positions: np.ndarray[Any, Any]) -> tuple[Any, Any]:
    """A canonical layer with the third row that its key is taken with: twice the thickness and twice the longer of the
    two shortest independent periods, which are rows of a reduced cell."""
    heights = positions[:, 2] * np.linalg.norm(cell[2])
    third = 2 * float(np.ptp(heights)) + 2 * float(np.linalg.norm(cell[1]))
    return (
        np.array([cell[0], cell[1], cell[2] * third / np.linalg.norm(cell[2])]),
        np.column_stack([positions[:, :2], heights / third]),
    )
