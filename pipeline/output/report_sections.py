"""The sections of a report, each from the facts that were read once to the HTML that stands under its heading."""

from __future__ import annotations

import platform
from dataclasses import dataclass
from typing import Any

import duckdb
import matplotlib
import numpy as np

from .. import __version__
from ..settings import Settings
from .questions import question_named
from .report_figures import curve_figure, lattice_map, map_figures, size_figure
from .report_groups import Groups
from .report_page import figure, paragraph, table
from .survey import Survey
from .svg import inline_svg
from .tables import number
from .tolerance_curve import COLUMNS, ToleranceCurve

MOST_ROWS = 100
"""Rows of the tables of findings, holds and refusals."""


@dataclass(frozen=True, slots=True)
class Facts:
    """What several sections need, read once."""

    connection: duckdb.DuckDBPyConnection
    settings: Settings
    status: dict[str, Any]
    survey: Survey
    curve: ToleranceCurve | None

    grade: str | None
    """near where it is computed, else key; None in an empty store."""

    groups: Groups | None


def ungrouped() -> str:
    """Instead of a section that needs groups."""
    return paragraph("Nothing is grouped yet. Group the store with: lattice-census group")


def _rows(facts: Facts, question: str, **values: Any) -> tuple[tuple[str, ...], list[tuple[Any, ...]]]:
    """The answer of a named question."""
    asked = question_named(question)
    cursor = facts.connection.execute(asked.sql, {p.name: p.default for p in asked.parameters} | values)
    return tuple(d[0] for d in cursor.description or []), cursor.fetchall()


def _share(part: int, whole: int) -> str:
    return f"{part:,} ({number(100.0 * part / whole) if whole else 0} %)"


def summary_html(facts: Facts) -> str:
    """What the store holds, in plain words."""
    told, totals = facts.status, facts.survey.totals
    records, crystals = told["current"], totals["crystals"]
    first = paragraph(
        f"The collection holds {records:,} records that take part in results, of {totals['formulas']:,} formulas from "
        f"{totals['sources']:,} sources. {told['rejected']:,} records were refused, {told['missing']:,} are gone from "
        f"their files, {told['withdrawn']:,} are withdrawn."
    )
    cells = paragraph(
        f"{_share(totals['oversized_cells'], records)} came in a cell larger than the primitive one. In "
        f"{_share(totals['pseudo_symmetric'], records)} the lattice has more symmetry than the crystal, and in "
        f"{_share(totals['symmetry_unsure'], records)} the space group hangs on the tolerance."
    )
    parts = [first, paragraph(f"By their canonical form they are {crystals:,} distinct crystals."), cells]
    at = next((g for g in told["groups"] if g["grade"] == facts.grade), None)
    if at is not None and facts.groups is not None:
        limits = ""
        if facts.grade == "near":
            limits = f" (largest shift {facts.settings.near_shift:g} Å, strain {facts.settings.near_strain:g})"
        set_aside = facts.connection.execute(
            "SELECT count(DISTINCT record_id) FROM decisions_in_force JOIN current_records USING (record_id)"
        ).fetchall()[0][0]
        parts.append(
            paragraph(
                f"At grade {at['grade']}{limits} they fall into {at['groups']:,} groups. "
                f"{_share(at['set_aside'], records)} of the records repeat another one; the largest group holds "
                f"{at['largest']:,}. {set_aside:,} records are set aside by a decision that can be taken back."
            )
        )
    else:
        parts.append(ungrouped())
    if facts.curve is not None:
        longest = facts.curve.plateaus()[0]
        chosen = " The chosen tolerance lies in it." if longest.start <= 1.0 < longest.end else ""
        parts.append(
            paragraph(
                f"The number of families stays at {longest.families:,} from {longest.start:.2f} to {longest.end:.2f} "
                f"times the limits of near, the longest stretch without a change.{chosen}"
            )
        )
    return "\n".join(parts)


def types_html(facts: Facts) -> str:
    """Lattice types by source, and against the crystal's."""
    found = facts.survey.tables["lattice_types_by_source"]
    crossed = facts.survey.tables["lattice_against_crystal"]
    return (
        paragraph("The type of the lattice alone, by the symbols of the International Union of Crystallography.")
        + table(found.title, found.columns, found.rows, most=MOST_ROWS)
        + paragraph(
            "Off the diagonal of the second table the two differ: the lattice has more symmetry than the crystal, or "
            "one of the two hangs on its tolerance."
        )
        + table(crossed.title, crossed.columns, crossed.rows)
    )


def map_html(facts: Facts) -> str:
    """All lattices in two planes."""
    shapes = lattice_map(facts.connection)
    if not len(shapes.lattice_type):
        return paragraph("There is no lattice to draw.")
    layers = facts.survey.totals["crystals"] - len(shapes.lattice_type)
    names = ("edges against one another", "edges against angles")
    captions = (
        "Edges a ≤ b ≤ c of the reduced cell: lattices of three equal edges lie in the upper right corner.",
        "V / (a b c) is 1 where all angles are right ones; primitive cubic lies at (1, 1), body-centred at "
        "(1, 0.77), face-centred at (1, 0.71).",
    )
    figures = [
        figure(
            inline_svg(f, f"map{i}", f"Map of the lattices: {name}", f"{len(shapes.lattice_type)} crystals"), caption
        )
        for i, (f, name, caption) in enumerate(zip(map_figures(shapes), names, captions, strict=True))
    ]
    told = "One mark for each distinct crystal; its type is told by marker and colour."
    if layers > 0:
        told += f" {layers:,} crystals are not drawn: layers, whose third edge is vacuum, and crystals without a type."
    return paragraph(told) + '<div class="row">' + "".join(figures) + "</div>"


def sizes_html(facts: Facts) -> str:
    """Given against primitive size."""
    found = facts.survey.tables["given_cells"]
    if not found.rows:
        return paragraph("There is no record.")
    drawn = size_figure([(row[0], row[1]) for row in found.rows[:24]])
    _, rows = _rows(facts, "oversized-cells")
    counted = {(row[0], row[1]): row[2] for row in rows}
    cells = sorted({row[1] for row in rows})
    sources = sorted({row[0] for row in rows})
    crossed = [(name, *(counted.get((name, index), 0) for index in cells)) for name in sources]
    svg = inline_svg(drawn, "sizes", "Given against primitive size", "Records by primitive cells in the given cell")
    return (
        figure(svg, "How many primitive cells the given cell holds; 1 is primitive. The scale is logarithmic above 10.")
        + table(found.title, found.columns, found.rows, most=MOST_ROWS)
        + table(
            "Records by source (rows) and primitive cells in the given cell (columns), larger ones only",
            ("source", *map(str, cells)),
            crossed,
            most=MOST_ROWS,
        )
    )


def tolerance_html(facts: Facts) -> str:
    """The tolerance curve, as figure and tables."""
    curve = facts.curve
    if curve is None:
        return ungrouped()
    rows = curve.rows()
    chosen = [i for i, row in enumerate(rows) if row[0] == 1.0]
    exact = (
        "No record has more matches than are stored, so the curve is exact."
        if curve.more == 0
        else f"{curve.more:,} records have, or may have, more matches than are stored: at t = 1 the numbers are exact, "
        "elsewhere they are upper bounds of the families and estimates of the groups."
    )
    stretches = [(p.start, p.end, p.end - p.start, p.families) for p in curve.plateaus()]
    svg = inline_svg(
        curve_figure(curve), "curve", "Families against tolerance",
        f"{curve.families(0)} families at t = 0, {curve.families(1.0)} at the chosen tolerance, "
        f"{curve.families(curve.window)} at the end of the window",
    )  # fmt: skip
    return (
        paragraph(
            f"At t the limits of near, a shift of {curve.near_shift:g} Å and a strain of {curve.near_strain:g}, are "
            "both multiplied by t. A long stretch without a change says that the number does not hang on the "
            "tolerance. Families are what hangs together; groups are stars around kept records, so that there are at "
            "least as many."
        )
        + figure(
            svg,
            "Steps: families; squares: groups; shaded: the longest stretches without a change; dashed: the chosen "
            "tolerance.",
        )
        + table("Families and groups at ten tolerances (the chosen one stands out)", COLUMNS, rows, chosen)
        + table("The longest stretches without a change", ("from_t", "to_t", "length", "families"), stretches)
        + paragraph(
            exact,
            "Each pair counts by its recorded match, the strictest grade's smallest shift; records pinned together "
            "count as one throughout.",
            note=True,
        )
    )


def findings_html(facts: Facts) -> str:
    """Findings and holds."""
    columns, rows = _rows(facts, "findings")
    counted: dict[str, int] = {}
    for row in rows:
        counted[row[0]] = counted.get(row[0], 0) + 1
    keep = [columns.index(c) for c in ("code", "record", "other_record", "grade", "value", "message")]
    listed = [tuple(row[i] for i in keep) for row in rows]
    holds = facts.connection.execute(
        "SELECT h.reason, h.grade, coalesce(k.source || ':' || k.label, r.source || ':' || r.label) AS record, "
        "h.message FROM holds h LEFT JOIN records k ON k.record_id = h.group_id "
        "LEFT JOIN records r ON r.record_id = h.record_id ORDER BY ALL"
    ).fetchall()
    return (
        table("Findings by code", ("code", "findings"), sorted(counted.items()))
        + table("Findings", [columns[i] for i in keep], listed, most=MOST_ROWS)
        + table("Held: what `keep` leaves alone", ("reason", "grade", "record", "message"), holds, most=MOST_ROWS)
    )


def leakage_html(facts: Facts) -> str:
    """What splits have in common."""
    if facts.grade is None:
        return ungrouped()
    _, rows = _rows(facts, "leakage", grade=facts.grade)
    sizes = facts.connection.execute(
        "SELECT split, count(*) FROM current_records WHERE split IS NOT NULL GROUP BY split ORDER BY split"
    ).fetchall()
    if not sizes:
        return paragraph("No record belongs to a split.")
    cells = {(row[0], row[1]): (row[2], row[3], row[5]) for row in rows}
    splits = [name for name, _ in sizes]
    matrix = []
    for name, records in sizes:
        line: list[Any] = [name, records]
        for other in splits:
            groups, shared, share = cells.get((name, other), (0, 0, 0.0))
            line.append("-" if other == name else f"{groups:,} groups, {shared:,} records, {number(float(share))} %")
        matrix.append(tuple(line))
    return paragraph(
        f"Read by rows: how many groups of grade {facts.grade} a split has in common with another, how many of its "
        "records stand in them, and which share of the split that is."
    ) + table("Splits (rows) in common with splits (columns)", ("split", "records", *splits), matrix)


def refusals_html(facts: Facts) -> str:
    """Refused records."""
    reasons = facts.survey.tables["refusals"]
    columns, rows = _rows(facts, "refusals-by-file")
    return table(reasons.title, reasons.columns, reasons.rows) + table(
        "Files with refused records", columns, rows, most=MOST_ROWS
    )


def settings_html(facts: Facts) -> str:
    """Settings, versions, runs."""
    settings = facts.connection.execute(
        "SELECT stage, name, value::VARCHAR FROM stage_settings ORDER BY ALL"
    ).fetchall()
    runs = facts.connection.execute(
        "SELECT run_id AS run, command, status, started_at, ended_at, version FROM runs ORDER BY run_id DESC"
    ).fetchall()
    schema = facts.connection.execute("SELECT max(version) FROM schema_migrations").fetchall()[0][0]
    versions = [
        ("lattice-census", __version__),
        ("store schema", str(schema)),
        ("Python", platform.python_version()),
        ("NumPy", np.__version__),
        ("DuckDB", duckdb.__version__),
        ("matplotlib", matplotlib.__version__),
    ]
    return (
        table("Settings that the stored rows were computed with", ("stage", "name", "value"), settings)
        + table("Versions that made this page", ("what", "version"), versions)
        + table(
            "Runs, the last first", ("run", "command", "status", "started_at", "ended_at", "version"), runs, most=20
        )
    )
