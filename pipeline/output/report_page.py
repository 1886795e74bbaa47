"""The parts that a report is put together from: escaped text, tables, the page. Nothing here knows the store."""

from __future__ import annotations

import base64
import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from datetime import datetime
from html import escape
from importlib.resources import files
from typing import Any

from .tables import cell_text, heading, safe

GENERATOR = "lattice-census report"
"""Marks a page as one of ours: only such a file is replaced."""


LONGEST_TEXT = 400
"""Characters of a text in a table before it is cut."""


def text(value: Any, digits: int | None = None) -> str:
    """A value as printed in tables, safe and escaped for HTML; texts are cut later than on a terminal.

    digits: so many after the point, for a number that is not whole.
    """
    if isinstance(value, str):
        return words(value if len(value) <= LONGEST_TEXT else value[: LONGEST_TEXT - 3] + "...")
    if digits is not None and isinstance(value, float):
        return f"{value:,.{digits}f}"
    return escape(cell_text(value))


def words(value: str) -> str:
    """A whole text, uncut, safe and escaped for HTML."""
    return escape(safe(value))


def paragraph(*sentences: str, note: bool = False) -> str:
    """Plain sentences as a paragraph; they are escaped here."""
    kind = ' class="note"' if note else ""
    return f"<p{kind}>{words(' '.join(s for s in sentences if s))}</p>"


def is_number(value: Any) -> bool:
    """Whether a value is set to the right."""
    return isinstance(value, int | float) and not isinstance(value, bool)


def table(
    caption: str,
    columns: Sequence[str],
    rows: Sequence[Sequence[Any]],
    chosen: Iterable[int] = (),
    most: int | None = None,
    name: str | None = None,
    right: Sequence[bool] | None = None,
    digits: Mapping[str, int] | None = None,
    rest: str | None = None,
) -> str:
    """A table that scrolls sideways by itself, its caption above it in the width of the page.

    Rows `chosen` stand out; beyond `most` rows only their number is said, and the command `rest` that lists all.
    Columns are headed as in printed tables. Those whose values are all numbers stand to the right, if `right` does not
    say otherwise, with `digits` after the point; shares have one. Zeros are pale, where a column of numbers is looked
    over for what is not zero.
    """
    if not rows:
        return paragraph(f"{caption}: none.")
    if right is None:
        values = [[row[i] for row in rows if row[i] is not None] for i in range(len(columns))]
        right = [bool(v) and all(map(is_number, v)) for v in values]
    after_point = [(digits or {}).get(c, 1 if c.endswith("_percent") else None) for c in columns]
    marked = set(chosen)
    shown = rows if most is None else rows[:most]
    own_id = f' id="{name}"' if name else ""
    lines = [f'<figure class="table"><figcaption>{words(caption)}</figcaption>',
             f'<div class="wide" tabindex="0" role="region" aria-label="{words(caption)}"><table{own_id}><thead><tr>',
             *(f'<th scope="col"{_class(right[i], "")}>{words(heading(c))}</th>' for i, c in enumerate(columns)),
             "</tr></thead><tbody>"]  # fmt: skip
    for number, row in enumerate(shown):
        lines.append('<tr class="chosen">' if number in marked else "<tr>")
        lines += [f"<td{_class(right[i], v)}>{text(v, after_point[i])}</td>" for i, v in enumerate(row)]
        lines.append("</tr>")
    lines.append("</tbody></table></div></figure>")
    left_out = len(rows) - len(shown)
    if left_out:
        told = "1 more row is left out here." if left_out == 1 else f"{left_out:,} more rows are left out here."
        lines.append(paragraph(told, f"All: lattice-census {rest}" if rest else "", note=True))
    return "\n".join(lines)


def _class(right: bool, value: Any) -> str:
    if right:
        return ' class="number zero"' if is_number(value) and value == 0 else ' class="number"'
    if isinstance(value, datetime):
        return ' class="whole"'
    return ' class="long"' if isinstance(value, str) and len(value) > 40 else ""


def figure(svg: str, caption: str) -> str:
    """A figure; the caption is escaped here, the SVG is ours."""
    return f"<figure>{svg}<figcaption>{words(caption)}</figcaption></figure>"


def side_by_side(*parts: str) -> str:
    """Parts beside each other where there is room, else below each other."""
    return '<div class="row">' + "".join(parts) + "</div>"


def measures(pairs: Sequence[tuple[str, Any]]) -> str:
    """Names and values as a list."""
    return "<dl>" + "".join(f"<dt>{words(n)}</dt><dd>{text(v)}</dd>" for n, v in pairs) + "</dl>"


def data_block(name: str, value: Any) -> str:
    """JSON that a script reads and no browser takes for HTML: every < is written as an escape."""
    written = json.dumps(value, ensure_ascii=False, separators=(",", ":"), allow_nan=False).replace("<", "\\u003c")
    return f'<script type="application/json" id="{name}">{written}</script>'


def page(title: str, subtitle: str, sections: Sequence[tuple[str, str, str]]) -> str:
    """The whole page from (id, title, HTML) of each section. It loads nothing, and runs no script but its own.

    The content security policy forbids every other script, also handlers in attributes, and every request.
    """
    here = files(__package__ or "lattice_census.output")
    css = (here / "report.css").read_text(encoding="utf-8")
    script = (here / "report.js").read_text(encoding="utf-8")
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    policy = (
        f"default-src 'none'; script-src 'sha256-{digest}'; style-src 'unsafe-inline'; img-src data:; "
        "base-uri 'none'; form-action 'none'"
    )
    links = "".join(f'<li><a href="#{name}">{words(head)}</a></li>' for name, head, _ in sections)
    body = "\n".join(
        f'<section id="{name}" aria-labelledby="{name}-head"><h2 id="{name}-head">{words(head)}</h2>\n'
        f"{html}\n</section>"
        for name, head, html in sections
    )
    return f"""<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="generator" content="{GENERATOR}">
<meta http-equiv="Content-Security-Policy" content="{policy}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{words(title)}</title>
<style>
{css}</style>
</head>
<body>
<a class="skip" href="#{sections[0][0]}">To the content</a>
<header><h1>{words(title)}</h1><p class="note">{words(subtitle)}</p></header>
<nav aria-label="Sections"><ul>{links}</ul></nav>
<main>
{body}
</main>
<script>{script}</script>
</body>
</html>
"""
