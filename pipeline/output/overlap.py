"""Which records of one source or split are the same crystal as one of another: counts and list, grade by grade.

Two records are the same where they match directly: equal content, equal key, or a verified match of their keys within
the grade. Pairs that a curator pinned apart are not. Of records with more matches than the store lists (`more_matches`)
a direct match may be missing from the list: for those, and for those only, standing in one family of the grade counts
too, and the row says so (`family`).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb

from ..errors import UsageError
from ..store.rows import one_row

GRADES = ("copy", "key", "same", "near")


@dataclass(frozen=True, slots=True)
class Overlap:
    """Records in common of two sides."""

    counts: tuple[dict[str, Any], ...]
    """A row a grade: records of A and of B whose closest reaches it or a stricter one."""

    rows: tuple[dict[str, Any], ...]
    """A row a record of A with its closest of B: record, other, grade, shift, strain, criterion (match or family)."""


def check_grade(connection: duckdb.DuckDBPyConnection, grade: str) -> None:
    """UsageError unless overlaps can be counted at the grade. Read-only."""
    if grade not in GRADES:
        raise UsageError(f"--grade {grade}: choose from {', '.join(GRADES)}.")
    if not one_row(connection, "SELECT 1 FROM members WHERE grade = ? LIMIT 1", [grade]):
        raise UsageError(f"The store has no groups of grade {grade}: give `lattice-census group` first.")


def overlap(connection: duckdb.DuckDBPyConnection, by: str, first: str, second: str, grade: str) -> Overlap:
    """Records of the source or split `first` that are the same as one of `second`. Read-only.

    by: source or split. Raises UsageError for a side without records.
    """
    _find(connection, by, grade, (first, second))
    names = [n for (n,) in connection.execute("SELECT DISTINCT side FROM overlap_sides ORDER BY 1").fetchall()]
    for side in (first, second):
        if side not in names:
            raise UsageError(f"No record that takes part in results has the {by} {side!r}.")
    counts = connection.execute(
        "SELECT g.grade, count(*) FILTER (p.side_a = $first AND p.best.place <= g.place) AS of_first, "
        "count(*) FILTER (p.side_a = $second AND p.best.place <= g.place) AS of_second FROM overlap_best p, "
        "(SELECT unnest(['copy', 'key', 'same', 'near']) AS grade, unnest([1, 2, 3, 4]) AS place) g "
        "WHERE g.place <= $last GROUP BY g.grade, g.place ORDER BY g.place",
        {"last": GRADES.index(grade) + 1, "first": first, "second": second},
    ).fetchall()
    known = {name: (a, b) for name, a, b in counts}
    told = [
        {"grade": name, "of_first": known.get(name, (0, 0))[0], "of_second": known.get(name, (0, 0))[1]}
        for name in GRADES[: GRADES.index(grade) + 1]
    ]
    cursor = connection.execute(
        "SELECT a.source || ':' || a.label AS record, a.record_id, b.source || ':' || b.label AS other, "
        "b.record_id AS other_record_id, (['copy', 'key', 'same', 'near'])[p.best.place] AS grade, "
        "CASE WHEN p.best.family THEN NULL ELSE p.best.shift END AS shift_angstrom, "
        "CASE WHEN p.best.family THEN NULL ELSE p.best.strain END AS strain, "
        "CASE WHEN p.best.family THEN 'family' ELSE 'match' END AS criterion FROM overlap_best p "
        "JOIN records a ON a.record_id = p.record_a JOIN records b ON b.record_id = p.best.record_b "
        "WHERE p.side_a = $first AND p.side_b = $second "
        "ORDER BY p.best.place, a.source, a.file, a.position, a.record_id",
        {"first": first, "second": second},
    )
    columns = [d[0] for d in cursor.description or []]
    rows = tuple(dict(zip(columns, row, strict=True)) for row in cursor.fetchall())
    return Overlap(tuple(told), rows)


def overlap_matrix(connection: duckdb.DuckDBPyConnection, by: str, grade: str) -> list[dict[str, Any]]:
    """For every two sources or splits with records in common: how many of each are the same as one of the other."""
    _find(connection, by, grade, None)
    cursor = connection.execute(
        "WITH numbers AS (SELECT side, count(*) AS number FROM overlap_sides GROUP BY side) "
        "SELECT p.side_a AS first, p.side_b AS second, p.number AS of_first, q.number AS of_second, "
        "a.number AS records_of_first, b.number AS records_of_second "
        "FROM (SELECT side_a, side_b, count(*) AS number FROM overlap_best GROUP BY side_a, side_b) p "
        "JOIN (SELECT side_a, side_b, count(*) AS number FROM overlap_best GROUP BY side_a, side_b) q "
        "ON q.side_a = p.side_b AND q.side_b = p.side_a JOIN numbers a ON a.side = p.side_a "
        "JOIN numbers b ON b.side = p.side_b WHERE p.side_a < p.side_b ORDER BY p.side_a, p.side_b"
    )
    columns = [d[0] for d in cursor.description or []]
    return [dict(zip(columns, row, strict=True)) for row in cursor.fetchall()]


def _find(connection: duckdb.DuckDBPyConnection, by: str, grade: str, sides: tuple[str, str] | None) -> None:
    """The temporary tables `overlap_sides` (record, side, key) and `overlap_best`: for each record and each other side
    that has the same crystal, the closest record there, as a struct in the order of closeness."""
    column = {"source": "r.source", "split": "r.split"}[by]
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE overlap_sides AS SELECT r.record_id, {column} AS side, r.content_hash, "
        "f.crystal_key, m.family_id, o.record_id IS NOT NULL AS more FROM current_records r "
        "JOIN canonical_forms f USING (record_id) "
        "LEFT JOIN members m ON m.grade = $grade AND m.record_id = r.record_id "
        "LEFT JOIN (SELECT DISTINCT record_id FROM more_matches) o ON o.record_id = r.record_id "
        f"WHERE {column} IS NOT NULL AND ($all OR list_contains($sides, {column}))",
        {"grade": grade, "all": sides is None, "sides": list(sides or ())},
    )
    ends = "a.record_id AS record_a, a.side AS side_a, b.record_id AS record_b, b.side AS side_b"
    equal = (
        f"SELECT {ends}, CASE WHEN a.content_hash = b.content_hash THEN 1 ELSE 2 END AS place, false AS family, "
        "0.0::DOUBLE AS shift, 0.0::DOUBLE AS strain FROM overlap_sides a "
        "JOIN overlap_sides b ON b.crystal_key = a.crystal_key AND b.side <> a.side"
    )
    matched = (
        f"SELECT {ends}, CASE m.grade WHEN 'same' THEN 3 ELSE 4 END, false, m.largest_shift_angstrom, m.strain "
        "FROM (SELECT crystal_key_a AS one, crystal_key_b AS two, grade, largest_shift_angstrom, strain FROM matches "
        "UNION ALL SELECT crystal_key_b, crystal_key_a, grade, largest_shift_angstrom, strain FROM matches) m "
        "JOIN overlap_sides a ON a.crystal_key = m.one JOIN overlap_sides b ON b.crystal_key = m.two "
        "AND b.side <> a.side WHERE m.grade IN ('same', 'near')"
    )
    family = (
        f"SELECT {ends}, $last, true, 0.0, 0.0 FROM overlap_sides a "
        "JOIN overlap_sides b ON b.family_id = a.family_id AND b.side <> a.side WHERE $last > 2 AND (a.more OR b.more)"
    )
    apart = (
        "SELECT 1 FROM pins_in_force n WHERE n.kind = 'apart' AND n.record_id = least(p.record_a, p.record_b) "
        "AND n.other_record_id = greatest(p.record_a, p.record_b)"
    )
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE overlap_best AS WITH found AS ({equal} UNION ALL {matched} UNION ALL {family}) "
        "SELECT p.record_a, p.side_a, p.side_b, min({'place': p.place, 'family': p.family, 'shift': p.shift, "
        "'strain': p.strain, 'record_b': p.record_b}) AS best FROM found p "
        f"WHERE p.place <= $last AND NOT EXISTS ({apart}) GROUP BY p.record_a, p.side_a, p.side_b",
        {"last": GRADES.index(grade) + 1},
    )
