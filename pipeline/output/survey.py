"""The survey: what lattices and crystals a store holds, as tables. Every number is computed by the store. Read-only."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb

from ..lattice.bravais import ALL_TYPES
from .tables import MISSING, Table, json_row, number

CAUTION = "Structures are as good as their source; what is counted here is geometry, not magnetic or electronic order."

BY: dict[str, str] = {
    "source": "r.source",
    "split": "r.split",
    "theory": "r.theory",
    "formula": "r.formula",
    "elements": "unnest(r.elements)",
}
"""What the survey can be divided by. By elements, a record counts for each element that it holds."""

_FROM = "FROM current_records r JOIN crystals x USING (record_id)"
_COUNTS = "count(*) AS records, count(DISTINCT x.crystal_key) AS crystals"
_SHARE = "100.0 * count(*) / sum(count(*)) OVER () AS share_percent"

TOTALS = f"""
SELECT {_COUNTS},
       count(DISTINCT r.formula) AS formulas,
       count(DISTINCT r.source) AS sources,
       count(*) FILTER (x.supercell_index > 1) AS oversized_cells,
       100.0 * count(*) FILTER (x.supercell_index > 1) / nullif(count(*), 0) AS oversized_percent,
       count(*) FILTER (x.pseudo_symmetric) AS pseudo_symmetric,
       100.0 * count(*) FILTER (x.pseudo_symmetric) / nullif(count(*), 0) AS pseudo_symmetric_percent,
       count(*) FILTER (x.symmetry_unsure) AS symmetry_unsure,
       (SELECT count(*) FROM rejects) AS refused
{_FROM}"""

SECTIONS: tuple[tuple[str, str, str], ...] = (
    (
        "lattice_types",
        "Lattice types (of the lattice alone)",
        f"SELECT x.lattice_type, {_COUNTS}, {_SHARE} {_FROM} GROUP BY x.lattice_type ORDER BY records DESC, 1",
    ),
    (
        "centrings",
        "Centrings",
        f"SELECT substr(x.lattice_type, 2, 1) AS centring, {_COUNTS}, {_SHARE} {_FROM} "
        "GROUP BY centring ORDER BY records DESC, 1",
    ),
    (
        "given_cells",
        "Given against primitive size: how many primitive cells the given cell holds (1: primitive)",
        f"SELECT x.supercell_index AS primitive_cells, {_COUNTS}, {_SHARE} {_FROM} "
        "GROUP BY x.supercell_index ORDER BY 1",
    ),
    (
        "sites",
        "Sites of the primitive cell",
        "SELECT CASE WHEN low = high THEN low::VARCHAR ELSE low || ' to ' || high END AS sites, records, crystals, "
        "share_percent FROM (SELECT CASE WHEN r.sites_primitive <= 2 THEN r.sites_primitive "
        "ELSE 1 + 2 ** (ceil(log2(r.sites_primitive)) - 1) END::INTEGER AS low, "
        "CASE WHEN r.sites_primitive <= 2 THEN r.sites_primitive ELSE 2 ** ceil(log2(r.sites_primitive)) END::INTEGER "
        f"AS high, {_COUNTS}, {_SHARE} {_FROM} GROUP BY low, high) ORDER BY low",
    ),
    (
        "pseudo_symmetric",
        "Pseudo-symmetric by lattice type: the lattice has more symmetry than the crystal",
        f"SELECT x.lattice_type, {_COUNTS}, count(*) FILTER (x.pseudo_symmetric) AS pseudo_symmetric, "
        "100.0 * count(*) FILTER (x.pseudo_symmetric) / count(*) AS share_percent "
        f"{_FROM} GROUP BY x.lattice_type HAVING count(*) FILTER (x.pseudo_symmetric) > 0 "
        "ORDER BY pseudo_symmetric DESC, 1",
    ),
    (
        "sources",
        "Sources",
        f"SELECT r.source, {_COUNTS}, {_SHARE} {_FROM} GROUP BY r.source ORDER BY records DESC, 1",
    ),
    (
        "formulas",
        "Formulas",
        f"SELECT r.formula, {_COUNTS}, {_SHARE} {_FROM} GROUP BY r.formula ORDER BY crystals DESC, records DESC, 1",
    ),
    (
        "refusals",
        "Refused records",
        "SELECT reason, count(*) AS records, count(DISTINCT source) AS sources, count(DISTINCT (source, file)) AS "
        "files FROM rejects GROUP BY reason ORDER BY records DESC, 1",
    ),
)
"""Name, title and query of each table; every query ends in a total order, so that `top` cuts the same rows always."""

CROSS = f"""
SELECT x.lattice_type, x.crystal_lattice_type, count(*) AS records
{_FROM} GROUP BY ALL ORDER BY ALL"""

DIVIDED = """
WITH divided AS (
    SELECT {by} AS value, x.crystal_key, x.lattice_type, x.supercell_index, x.pseudo_symmetric, r.sites_primitive
    FROM current_records r JOIN crystals x USING (record_id)
),
types AS (
    SELECT value, lattice_type, count(*) AS n FROM divided GROUP BY ALL
),
most AS (
    SELECT value, lattice_type FROM types
    QUALIFY row_number() OVER (PARTITION BY value ORDER BY n DESC, lattice_type) = 1
)
SELECT d.value AS {name},
       count(*) AS records,
       count(DISTINCT d.crystal_key) AS crystals,
       min(m.lattice_type) AS commonest_lattice_type,
       100.0 * count(*) FILTER (d.lattice_type = m.lattice_type) / count(*) AS of_that_type_percent,
       100.0 * count(*) FILTER (d.supercell_index > 1) / count(*) AS oversized_percent,
       100.0 * count(*) FILTER (d.pseudo_symmetric) / count(*) AS pseudo_symmetric_percent,
       median(d.sites_primitive) AS median_sites
FROM divided d JOIN most m ON m.value IS NOT DISTINCT FROM d.value
GROUP BY d.value
ORDER BY records DESC, d.value NULLS LAST"""

DIVIDED_TYPES = """
SELECT value, lattice_type, count(*) AS records
FROM (
    SELECT {by} AS value, x.lattice_type FROM current_records r JOIN crystals x USING (record_id)
)
GROUP BY ALL ORDER BY ALL"""


@dataclass(frozen=True, slots=True)
class Survey:
    """The tables of a survey."""

    totals: dict[str, Any]
    """Counts over everything by name."""

    tables: dict[str, Table]
    left_out: dict[str, int]
    """By name of a table: rows beyond `top`, where there are any."""

    def as_json(self) -> dict[str, Any]:
        """Everything, ready for json.dumps; shares in percent."""
        return {
            "totals": self.totals,
            **{name: table.as_json()["rows"] for name, table in self.tables.items()},
            "left_out": self.left_out,
            "caution": CAUTION,
        }


def survey(connection: duckdb.DuckDBPyConnection, by: str | None = None, top: int = 20) -> Survey:
    """Survey the current records: records, and distinct crystals by their key.

    by: a key of BY; adds a table with one row a value, and one of the lattice types of each. top: rows of a long table;
    what is left out is counted.
    """
    cursor = connection.execute(TOTALS)
    names = [d[0] for d in cursor.description or []]
    totals = json_row(names, cursor.fetchone() or ())
    tables: dict[str, Table] = {}
    left_out: dict[str, int] = {}

    def add(name: str, title: str, columns: tuple[str, ...], rows: list[tuple[Any, ...]]) -> None:
        if len(rows) > top:
            left_out[name] = len(rows) - top
        tables[name] = Table(title, columns, tuple(rows[:top]))

    for name, title, sql in SECTIONS:
        add(name, title, *_rows(connection, sql))
        if name == "centrings":
            pairs = connection.execute(CROSS).fetchall()
            title = "Records by lattice type of the lattice (rows) and of the crystal (columns)"
            add("lattice_against_crystal", title, *_cross("lattice_type", pairs))
    if by is not None:
        note = ", one record counting for each of its elements" if by == "elements" else ""
        columns, rows = _rows(connection, DIVIDED.format(by=BY[by], name=by))
        add(f"by_{by}", f"By {by}{note}", columns, rows)
        order = {row[0]: i for i, row in enumerate(rows)}
        cells = connection.execute(DIVIDED_TYPES.format(by=BY[by])).fetchall()
        columns, rows = _cross(by, cells)
        rows.sort(key=lambda row: order[row[0]])
        add(f"lattice_types_by_{by}", f"Records by {by} (rows) and lattice type (columns){note}", columns, rows)
    return Survey(totals, tables, left_out)


def _rows(connection: duckdb.DuckDBPyConnection, sql: str) -> tuple[tuple[str, ...], list[tuple[Any, ...]]]:
    cursor = connection.execute(sql)
    return tuple(d[0] for d in cursor.description or []), cursor.fetchall()


def _cross(corner: str, cells: list[tuple[Any, Any, int]]) -> tuple[tuple[str, ...], list[tuple[Any, ...]]]:
    """Cells (row, column, number) as a table; a cell that is not there is 0."""
    numbers = {(row, MISSING if column is None else str(column)): n for row, column, n in cells}
    present = {column for _, column in numbers}
    across = [t for t in ALL_TYPES if t in present] + sorted(present - set(ALL_TYPES))
    down = list(dict.fromkeys(row for row, _, _ in cells))
    if corner == "lattice_type":
        down.sort(key=lambda t: (ALL_TYPES.index(t) if t in ALL_TYPES else len(ALL_TYPES), str(t)))
    return (corner, *across), [(row, *(numbers.get((row, column), 0) for column in across)) for row in down]


def survey_text(found: Survey) -> str:
    """The survey as a page of plain text."""
    t = found.totals
    page = [
        f"{number(t['records'])} records, {number(t['crystals'])} distinct crystals (by key), "
        f"{number(t['formulas'])} formulas, {number(t['sources'])} sources; {number(t['refused'])} records refused"
    ]
    if t["records"]:
        page[0] += (
            f"\ngiven cells larger than primitive: {number(t['oversized_cells'])} "
            f"({number(t['oversized_percent'])} %); "
            f"pseudo-symmetric: {number(t['pseudo_symmetric'])} ({number(t['pseudo_symmetric_percent'])} %); "
            f"space group hangs on the tolerance: {number(t['symmetry_unsure'])}"
        )
    for name, table in found.tables.items():
        text = table.text()
        if name in found.left_out:
            text += f"\n({number(found.left_out[name])} more; --top shows more rows)"
        page.append(text)
    page.append(CAUTION)
    return "\n\n".join(page)
