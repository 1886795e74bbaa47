"""The groups of a report: one row a group of several records, as data for the page and as its first page. Read-only."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import duckdb

from .report_page import data_block, paragraph, table
from .tables import safe

MOST_GROUPS = 20_000
"""Of more groups only the largest stand in the table; a group takes about 200 bytes of the page."""

FIRST_PAGE = 50
"""Rows that stand in the page without its script, as PAGE_ROWS in report.js."""

COLUMNS = ("kept_record", "formula", "lattice", "space_group", "records", "sources", "largest_shift_angstrom",
           "largest_strain", "t", "splits", "energy_spread_ev_per_site", "held")  # fmt: skip

DIGITS = {"records": 0, "sources": 0, "largest_shift_angstrom": 4, "largest_strain": 5, "t": 3,
          "energy_spread_ev_per_site": 4}  # fmt: skip
"""Columns of numbers, and the digits after the point that they are kept and shown with."""

GROUPS = """
WITH spread AS (
    SELECT group_id, max(spread) AS spread FROM (
        SELECT m.group_id, max(r.energy_ev_per_site) - min(r.energy_ev_per_site) AS spread
        FROM members m JOIN records r USING (record_id)
        WHERE m.grade = $grade AND r.energy_ev_per_site IS NOT NULL
        GROUP BY m.group_id, r.theory
    ) GROUP BY group_id
),
held AS (
    SELECT group_id, string_agg(DISTINCT reason, ', ' ORDER BY reason) AS reasons FROM holds
    WHERE grade = $grade AND group_id IS NOT NULL GROUP BY group_id
)
SELECT m.group_id,
       any_value(k.source || ':' || k.label),
       any_value(k.formula),
       any_value(x.lattice_type),
       any_value(x.space_group_symbol),
       count(*) AS records,
       count(DISTINCT m.source),
       max(m.witness_shift_angstrom),
       max(m.witness_strain),
       max(greatest(m.witness_shift_angstrom / $near_shift, m.witness_strain / $near_strain)),
       string_agg(DISTINCT r.split, ', ' ORDER BY r.split),
       any_value(s.spread),
       any_value(h.reasons)
FROM members m
JOIN records r USING (record_id)
JOIN records k ON k.record_id = m.group_id
LEFT JOIN crystals x ON x.record_id = m.group_id
LEFT JOIN spread s ON s.group_id = m.group_id
LEFT JOIN held h ON h.group_id = m.group_id
WHERE m.grade = $grade
GROUP BY m.group_id
HAVING count(*) > 1
ORDER BY records DESC, m.group_id"""

FARTHEST = """
SELECT record_id FROM members WHERE grade = $grade AND group_id = $group AND NOT kept
ORDER BY greatest(witness_shift_angstrom / $near_shift, witness_strain / $near_strain) DESC NULLS LAST, record_id
LIMIT 1"""


@dataclass(frozen=True, slots=True)
class Groups:
    """Groups of several records at one grade, the largest first."""

    grade: str
    near_shift: float
    near_strain: float

    ids: list[str]
    """(n,): group ids."""

    rows: list[tuple[Any, ...]]
    """(n,) rows of COLUMNS."""

    def t(self, i: int) -> float:
        """How far the farthest member of a group is from its kept record, in limits of near."""
        value = self.rows[i][COLUMNS.index("t")]
        return -1.0 if value is None else float(value)

    def largest(self, count: int) -> list[int]:
        """Places of the groups of the most records."""
        return list(range(min(count, len(self.ids))))

    def least_certain(self, count: int, without: Sequence[int]) -> list[int]:
        """Places of the groups whose farthest member is nearest to the limits; those of equal keys alone are none."""
        left = [i for i in range(len(self.ids)) if i not in set(without) and self.t(i) > 0]
        return sorted(left, key=lambda i: (-self.t(i), self.ids[i]))[:count]


def find_groups(connection: duckdb.DuckDBPyConnection, grade: str, near_shift: float, near_strain: float) -> Groups:
    """The groups of more than one record at a grade."""
    values = {"grade": grade, "near_shift": near_shift, "near_strain": near_strain}
    found = connection.execute(GROUPS, values).fetchall()
    return Groups(grade, near_shift, near_strain, [row[0] for row in found], [row[1:] for row in found])


def farthest_member(connection: duckdb.DuckDBPyConnection, groups: Groups, i: int) -> str:
    """The set-aside record of a group that is farthest from the kept one."""
    values = {"grade": groups.grade, "group": groups.ids[i], "near_shift": groups.near_shift,
              "near_strain": groups.near_strain}  # fmt: skip
    return str(connection.execute(FARTHEST, values).fetchall()[0][0])


def groups_html(groups: Groups) -> str:
    """Controls, the table, and its data. Without the script the largest groups stand there."""
    if not groups.rows:
        return paragraph(f"No group of grade {groups.grade} has more than one record.")
    rows = groups.rows[:MOST_GROUPS]
    several = "1 group" if len(groups.rows) == 1 else f"{len(groups.rows):,} groups"
    told = [f"{several} of grade {groups.grade} with more than one record."]
    if len(rows) < len(groups.rows):
        told.append(f"The {len(rows):,} largest stand here; `lattice-census ask largest-groups` lists all.")
    told.append(
        "t is max(shift / limit, strain / limit) of the farthest member: at 0 all have equal keys, near 1 the group "
        "depends on the limits. The table is printed as it is shown."
    )
    controls = (
        '<div class="controls" id="groups-controls" hidden>'
        '<label>Words to look for <input id="groups-filter" type="search" autocomplete="off"></label>'
        '<label>At least so many records <input id="groups-least" type="number" min="0" step="1"></label>'
        '<button type="button" id="groups-before">Previous page</button>'
        '<button type="button" id="groups-after">Next page</button></div>'
        '<p class="note" id="groups-said" role="status"></p>'
    )
    digits = [DIGITS.get(c) for c in COLUMNS]
    data = {
        "rows": [[compact(v, d) for v, d in zip(row, digits, strict=True)] for row in rows],
        "digits": digits,
        "records": COLUMNS.index("records"),
    }
    shown = [[_shown(v, d) for v, d in zip(row, digits, strict=True)] for row in rows[:FIRST_PAGE]]
    first = table(f"Groups at grade {groups.grade}", COLUMNS, shown, name="groups-table",
                  right=[d is not None for d in digits])  # fmt: skip
    return paragraph(*told) + controls + first + data_block("groups-data", data)


def compact(value: Any, digits: int | None) -> Any:
    """A value as JSON has it: numbers rounded to `digits` after the point, texts without control characters."""
    if value is None:
        return None
    if digits is None:
        return safe(str(value))
    if digits == 0:
        return int(value)
    return round(float(value), digits) if math.isfinite(value) else None


def _shown(value: Any, digits: int | None) -> Any:
    """As report.js shows it."""
    kept = compact(value, digits)
    return kept if kept is None or digits is None else f"{kept:,.{digits}f}"
