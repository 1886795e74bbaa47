"""The pairs of a report: kept and farthest set-aside record of a group, laid over each other, with their measures."""

from __future__ import annotations

import duckdb

from ..grouping.reasons import REASONS
from .overlay import Overlay, overlay
from .overlay_picture import MOST_SITES, SMALLEST_SHIFT, overlay_figure
from .report_groups import COLUMNS, Groups, farthest_member
from .report_page import measures, paragraph, words
from .svg import COLOURS, MARKERS, inline_svg

GLYPHS = dict(zip(MARKERS, "●■▲◆▼✚✖⬟★◀▶⯃⬧⬢", strict=True))
"""A character for each marker, for the legend in words."""

EACH = 6
"""Pictures of the largest groups, and of the least certain ones."""


def pairs_html(connection: duckdb.DuckDBPyConnection, groups: Groups) -> str:
    """Both rows of pictures. Read-only."""
    if not groups.ids:
        return paragraph("There is no group of more than one record to draw.")
    largest = groups.largest(EACH)
    unsure = groups.least_certain(EACH, largest)
    intro = paragraph(
        "Of each group the kept record (filled marks) and the set-aside one that is farthest from it (outlined marks), "
        "in the cell that both have in common, seen along the axis that shows most. The mean shift is taken off and "
        "the strain is not drawn. Arrows lead from each kept site to its partner. They are drawn longer than they "
        "are: the bar is one length between sites and another one of an arrow."
    )
    parts = [intro, "<h3>The largest groups</h3>", _cards(connection, groups, largest)]
    if unsure:
        parts += ["<h3>The least certain of the other groups</h3>", _cards(connection, groups, unsure)]
    elif len(groups.ids) > len(largest):
        parts.append(paragraph("All other groups are of equal keys."))
    return "\n".join(parts)


def _cards(connection: duckdb.DuckDBPyConnection, groups: Groups, places: list[int]) -> str:
    cards = [_card(connection, groups, i) for i in places]
    return '<div class="cards">' + "\n".join(cards) + "</div>"


def _card(connection: duckdb.DuckDBPyConnection, groups: Groups, i: int) -> str:
    found = overlay(connection, groups.ids[i], farthest_member(connection, groups, i))
    formula, records = (groups.rows[i][COLUMNS.index(name)] for name in ("formula", "records"))
    head = f"<h4>{words(str(formula))}, {records:,} records</h4>"
    if found is None:
        return f'<article class="card">{head}{paragraph("The store holds no match of this pair.")}</article>'
    return f'<article class="card">{head}{pair_html(found, f"pair{i}")}</article>'


def pair_html(found: Overlay, name: str) -> str:
    """Picture, legend and measures of one pair; `name` is the prefix of its ids."""
    if len(found.sites) > MOST_SITES:
        drawing = paragraph(f"The common cell has {len(found.sites):,} sites: too many to be told apart in a picture.")
    else:
        picture, factor = overlay_figure(found)
        axis = "abc"[found.axis]
        drawn = "arrows as long as they are" if factor == 1 else f"arrows {factor} times as long as they are"
        if found.distances.max() < SMALLEST_SHIFT:
            drawn = "no shift to draw"
        svg = inline_svg(
            picture, name, f"{found.kept.name} and {found.aside.name}",
            f"{len(found.sites)} sites of the common cell along axis {axis}; largest shift "
            f"{found.distances.max():.4f} angstrom, {drawn}.",
        )  # fmt: skip
        caption = f"{_legend(found)}; along axis {axis} of the common cell; {words(drawn)}."
        drawing = f"<figure>{svg}<figcaption>{caption}</figcaption></figure>"
    return drawing + measures(
        [
            ("kept", found.kept.name),
            ("set aside", found.aside.name),
            ("reason", _reason(found)),
            ("largest shift", f"{found.largest_shift:.4f} Å"),
            ("rms shift", f"{found.rms_shift:.4f} Å"),
            ("strain", f"{found.strain:.5f}"),
            ("volume ratio" if found.kept.periodicity == 3 else "area ratio", f"{found.volume_ratio:.5f}"),
            ("sites", len(found.sites)),
        ]
    )


def _reason(found: Overlay) -> str:
    """The reason and what it means."""
    told = f"{found.reason.replace('_', ' ')}: {REASONS[found.reason]}"
    return f"{told}; only the mirror image matches" if found.mirrored and found.reason != "mirror" else told


def _legend(found: Overlay) -> str:
    """Species with their marker in their colour."""
    return ", ".join(
        f'<span style="color:{COLOURS[i % len(COLOURS)]}">{GLYPHS[MARKERS[i % len(MARKERS)]]}</span> {words(token)}'
        for i, token in enumerate(sorted(set(found.tokens)))
    )
