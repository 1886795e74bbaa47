"""The sections of a report, each from the facts that were read once to the HTML that stands under its heading."""

from __future__ import annotations

import json
import platform
from typing import Any

import duckdb
import matplotlib
import numpy as np

from .. import __version__
from ..lattice.bravais import ALL_TYPES, FAMILY_NAME
from ..model.refusals import REASONS
from ..settings import Settings
from .findings import finding_queries
from .report_facts import Facts, counted, ungrouped
from .report_figures import curve_figure, lattice_map, layer_figure, layer_map, map_figures, size_figure
from .report_page import figure, paragraph, side_by_side, table
from .svg import inline_svg
from .tolerance_curve import COLUMNS, ToleranceCurve

MOST_ROWS = 100
"""Rows of the tables of findings, holds and refusals."""

MOST_BARS = 24
"""Bars in the figure of given cells."""

CENTRING_NAME = {
    "P": "primitive", "S": "with one centred face", "I": "body-centred", "F": "face-centred", "R": "rhombohedral",
    "p": "primitive in a plane", "c": "centred in a plane",
}  # fmt: skip

MAPS = (
    (
        "edges against angles",
        "a ≤ b ≤ c are the edges of the reduced cell, V is its volume. V / (a b c) is 1 where all angles are right "
        "ones; primitive cubic lies at (1, 1), body-centred at (1, 0.77), face-centred at (1, 0.71).",
    ),
    (
        "edges against one another",
        "Lattices of three equal edges lie in the upper right corner, those with a = b at the right edge.",
    ),
)
"""Name and caption of each figure of `map_figures`."""

MAP_OF_LAYERS = (
    "layers",
    "Layers: a ≤ b are the edges of the reduced cell in the plane. Square lies at (1, 1), hexagonal at (1, 0.87).",
)


def types_html(facts: Facts) -> str:
    """Lattice types by source, and against the crystal's."""
    found = facts.survey.tables["lattice_types_by_source"]
    crossed = facts.survey.tables["lattice_against_crystal"]
    seen = {*found.columns, *crossed.columns, *(row[0] for row in crossed.rows)}
    used = [t for t in ALL_TYPES if t in seen]
    names = [f"{f} {FAMILY_NAME[f]}" for f in dict.fromkeys(t[0] for t in used if t != "mp")]
    names += ["m in a plane oblique"] if "mp" in used else []
    names += [f"{c} {CENTRING_NAME[c]}" for c in dict.fromkeys(t[1] for t in used)]
    if not names:
        return paragraph("There is no lattice.")
    return (
        paragraph(
            "The type of the lattice alone, by the symbols of the International Union of Crystallography:",
            ", ".join(names) + ".",
        )
        + table(found.title, found.columns, found.rows, most=MOST_ROWS, rest="ask lattice-types-by-source")
        + paragraph(
            "Where the two types below differ, the lattice has more symmetry than the crystal, or one of the two "
            "depends on its tolerance."
        )
        + table(crossed.title, crossed.columns, crossed.rows)
    )


def map_html(facts: Facts) -> str:
    """All lattices in two planes, and the lattices of layers in theirs."""
    shapes, layers = lattice_map(facts.connection), layer_map(facts.connection)
    drawn, of_layers = len(shapes.lattice_type), len(layers.lattice_type)
    if not drawn + of_layers:
        return paragraph("There is no lattice to draw.")
    figures = [(f, drawn, *words) for f, words in zip(map_figures(shapes), MAPS, strict=True)] if drawn else []
    if of_layers:
        figures.append((layer_figure(layers), of_layers, *MAP_OF_LAYERS))
    parts = [
        figure(inline_svg(f, f"map{i}", f"Map of the lattices: {name}", counted(crystals, "crystal")), caption)
        for i, (f, crystals, name, caption) in enumerate(figures)
    ]
    told = "One mark for each distinct crystal; marker and colour tell its lattice type."
    left = facts.survey.totals["crystals"] - drawn - of_layers
    if left:
        told += f" {counted(left, 'crystal')} without a lattice type {'is' if left == 1 else 'are'} not drawn."
    return paragraph(told) + side_by_side(*parts)


def sizes_html(facts: Facts) -> str:
    """Given against primitive size."""
    found = facts.survey.tables["given_cells"]
    if not found.rows:
        return paragraph("There is no record.")
    listed = table("How many primitive cells the given cell holds", found.columns, found.rows, most=MOST_ROWS)
    if [row[0] for row in found.rows] == [1]:
        return paragraph("Every record came in a primitive cell.") + listed
    drawn = size_figure([(row[0], row[1]) for row in found.rows[:MOST_BARS]])
    _, rows = facts.answer("oversized-cells")
    numbers = {(row[0], row[1]): row[2] for row in rows}
    cells = sorted({row[1] for row in rows})
    sources = sorted({row[0] for row in rows})
    crossed = [(name, *(numbers.get((name, index), 0) for index in cells)) for name in sources]
    svg = inline_svg(drawn, "sizes", "Given against primitive size", "Records by primitive cells in the given cell")
    caption = "1 (dark) is primitive. The scale is logarithmic above 10."
    return side_by_side(figure(svg, caption), listed) + table(
        "Records in larger cells, by source (rows) and primitive cells in the given cell (columns)",
        ("source", *map(str, cells)),
        crossed,
        most=MOST_ROWS,
        rest="ask oversized-cells",
    )


def tolerance_html(facts: Facts) -> str:
    """The tolerance curve, as figure and tables."""
    curve = facts.curve
    if curve is None:
        return ungrouped()
    rows = curve.rows()
    chosen = [i for i, row in enumerate(rows) if row[0] == 1.0]
    stretches = [(p.start, p.end, p.end - p.start, p.families) for p in curve.plateaus()]
    svg = inline_svg(
        curve_figure(curve), "curve", "Families against tolerance",
        f"{curve.families(0)} families at t = 0, {curve.families(1.0)} at the chosen tolerance, "
        f"{curve.families(curve.window)} at the end of the window",
    )  # fmt: skip
    caption = "Steps: families; squares: groups; shaded: longest stretches without a change; dashed: chosen tolerance."
    counts = table("Families and groups at ten tolerances (bold: the chosen one)", COLUMNS, rows, chosen,
                   digits={"t": 1, "strain": 4, "shift_angstrom": 3})  # fmt: skip
    lengths = table("The longest stretches without a change", ("from_t", "to_t", "length", "families"), stretches,
                    digits=dict.fromkeys(("from_t", "to_t", "length"), 3))  # fmt: skip
    told = (
        f"At t the limits of near, a shift of {curve.near_shift:g} Å and a strain of {curve.near_strain:g}, are both "
        "multiplied by t. Families are what hangs together; groups are stars around kept records, so that there are at "
        "least as many. A long stretch without a change says that the number does not depend on the tolerance."
    )
    if not len(curve.steps):
        told += " Here no two crystals match anywhere in the window."
    return (
        paragraph(told) + side_by_side(figure(svg, caption), counts) + lengths + paragraph(_exactness(curve), note=True)
    )


def _exactness(curve: ToleranceCurve) -> str:
    exact = (
        "No record has more matches than are stored, so the curve is exact."
        if curve.more == 0
        else f"{counted(curve.more, 'record')} may have more matches than are stored: at t = 1 the numbers are exact, "
        "elsewhere they are upper bounds of the families and estimates of the groups."
    )
    return (
        f"{exact} Each pair counts by its recorded match, the strictest grade's smallest shift; records pinned "
        "together count as one throughout."
    )


def findings_html(facts: Facts) -> str:
    """Findings and holds."""
    columns, rows = facts.answer("findings")
    numbers: dict[str, int] = {}
    for row in rows:
        numbers[row[0]] = numbers.get(row[0], 0) + 1
    meanings = {code: sentence for code, (sentence, _) in finding_queries().items()}
    keep = [columns.index(c) for c in ("code", "record", "other_record", "grade", "message")]
    listed = [tuple(row[i] for i in keep) for row in rows]
    by_code = [(code, number, meanings.get(code)) for code, number in sorted(numbers.items())]
    found = table("Findings by code", ("code", "findings", "meaning"), by_code) + table(
        "Findings", [columns[i] for i in keep], listed, most=MOST_ROWS, rest="ask findings"
    )
    held = table(
        f"Held at grade {facts.grade}: `keep` leaves these alone until a curator has looked",
        ("reason", "record", "message"),
        facts.holds,
        most=MOST_ROWS,
        rest="ask --sql 'FROM holds'",
    )
    return (found if rows else paragraph("There is no finding.")) + (
        held if facts.holds else paragraph("`keep` leaves no group or record alone.")
    )


def leakage_html(facts: Facts) -> str:
    """What splits have in common."""
    if facts.grade is None:
        return ungrouped()
    _, rows = facts.answer("leakage", grade=facts.grade)
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
            told = f"{float(share):.1f} % ({counted(shared, 'record')} in {counted(groups, 'group')})"
            line.append(None if other == name else told if groups else "nothing")
        matrix.append(tuple(line))
    return paragraph(
        "Read by rows: which share of a split's records stand in a group that the other split has records of too, at "
        f"grade {facts.grade}. What a model was trained on in the one, it is tested on in the other."
    ) + table("Splits (rows) in common with splits (columns)", ("split", "records", *splits), matrix)


def refusals_html(facts: Facts) -> str:
    """Refused records."""
    reasons = facts.survey.tables["refusals"]
    if not reasons.rows:
        return paragraph("No record was refused.")
    columns, rows = facts.answer("refusals-by-file")
    explained = [(*row, REASONS.get(row[0])) for row in reasons.rows]
    return table(reasons.title, (*reasons.columns, "meaning"), explained) + table(
        "Files with refused records", columns, rows, most=MOST_ROWS, rest="ask refusals-by-file"
    )


def settings_html(facts: Facts) -> str:
    """Settings, versions, runs."""
    meanings = {name: field.description for name, field in Settings.model_fields.items()}
    settings = [
        (stage, name, _setting_text(value), meanings.get(name))
        for stage, name, value in facts.connection.execute(
            "SELECT stage, name, value::VARCHAR FROM stage_settings ORDER BY ALL"
        ).fetchall()
    ]
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
        table("Settings that the stored rows were computed with", ("stage", "name", "value", "meaning"), settings)
        + table("Versions that made this page", ("what", "version"), versions)
        + table(
            "Runs, the last first", ("run", "command", "status", "started_at", "ended_at", "version"), runs, most=20
        )
    )


def _setting_text(value: str) -> str:
    """A setting as a person writes it, from its JSON."""
    told = json.loads(value)
    if isinstance(told, list):
        return ", ".join(map(str, told)) or "(none)"
    return str(told)
