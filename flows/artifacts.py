"""What Prefect shows of a flow that ended: its counts, as text and as a table, and where the report of the store is.

Prefect's own record is a convenience: a flow whose artifacts cannot be written has done its work all the same, and says
so in one line.
"""

from __future__ import annotations

import re
import sys
from pathlib import Path
from typing import Any

PREFIX = "lattice-census"


def show_counts(flow: str, store: Path, counts: dict[str, Any]) -> None:
    """Write both artifacts of a flow that has published its store; called inside the flow's run."""
    from prefect.artifacts import create_markdown_artifact, create_table_artifact

    rows = counted(counts)
    try:
        create_table_artifact(
            [{"what": what, "number": number} for what, number in rows],
            key=f"{PREFIX}-{flow}-counts",
            description=f"What `{flow}` counted.",
        )
        create_markdown_artifact(
            summary(flow, store, rows), key=f"{PREFIX}-{flow}", description=f"What `{flow}` did, and where to look."
        )
    except Exception as error:
        told = f"{type(error).__name__}: {error}".splitlines()[0]
        print(f"lattice-census: the work is done, but Prefect could not be shown its counts ({told}).", file=sys.stderr)


def counted(counts: dict[str, Any], before: str = "") -> list[tuple[str, int]]:
    """Every whole number among the counts of a flow with its name, in their order: `group: families, near`.

    Names are those of our own counts, grades, reasons and codes; nothing of the input is among them.
    """
    rows: list[tuple[str, int]] = []
    for name, value in counts.items():
        words = name.replace("_", " ")
        if isinstance(value, bool):
            rows += [(f"{before}{words}", 1)] if value else []
        elif isinstance(value, int):
            rows.append((f"{before}{words}", value))
        elif isinstance(value, dict):
            rows += counted(value, f"{before}{words}{', ' if before else ': '}")
    return rows


def summary(flow: str, store: Path, rows: list[tuple[str, int]]) -> str:
    """The text of the artifact (CommonMark)."""
    store = store.absolute()
    report = store.parent / "report.html"
    where = code(f"lattice-census report --store {store}")
    if report.exists():
        place = f"The report is at {code(str(report))}; it is brought up to date with {where}."
    else:
        place = f"There is no report yet; {where} writes it to {code(str(report))}."
    lines = [f"- {what}: {number:,}" for what, number in rows]
    return "\n".join([f"`{flow}` is done, and the store at {code(str(store))} is published.", "", *lines, "", place])


def code(text: str) -> str:
    """A text as a code span, whatever backticks it holds (CommonMark 0.31, 6.1)."""
    longest = max(map(len, re.findall("`+", text)), default=0)
    fence, room = "`" * (longest + 1), " " if longest else ""
    return f"{fence}{room}{' '.join(text.splitlines())}{room}{fence}"
