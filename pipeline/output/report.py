"""The report: one HTML page about a store that needs nothing but itself, for a screen, a telephone or paper.

It depends on the store and the versions it names alone (no time of day, no path): the same store gives the same page.
Read-only.
"""

from __future__ import annotations

import os
from pathlib import Path

import duckdb
import matplotlib

from .. import __version__
from ..errors import UsageError
from .report_facts import read_facts, ungrouped
from .report_groups import groups_html
from .report_page import GENERATOR, page, paragraph
from .report_pairs import pairs_html
from .report_sections import (
    findings_html,
    leakage_html,
    map_html,
    refusals_html,
    settings_html,
    sizes_html,
    tolerance_html,
    types_html,
)
from .report_summary import summary_html
from .svg import style

CAUTIONS = (
    "Structures are as good as their source; a parsed file is not a checked calculation.",
    "A grade is a geometric statement, not a magnetic or electronic one: magnetic order, charge states and level of "
    "theory are not compared.",
    "Energies are compared only within one theory, and only where their unit was given.",
    "A merge is a proposal. Look at the witness before a record is dropped, and keep the input.",
    "Nothing here says that a material is safe to handle.",
)


def write_report(connection: duckdb.DuckDBPyConnection, path: Path) -> int:
    """Write the page, whole or not at all; returns its size in bytes. Raises UsageError as `check_target`."""
    check_target(path)
    written = report_html(connection).encode("utf-8")
    unfinished = path.with_name(f".{path.name}.{os.getpid()}.new")
    try:
        unfinished.write_bytes(written)
        unfinished.replace(path)
    finally:
        unfinished.unlink(missing_ok=True)
    return len(written)


def check_target(path: Path) -> None:
    """Raise UsageError where the page cannot be put: only an earlier report is replaced."""
    if not path.parent.is_dir():
        raise UsageError(f"There is no folder {path.parent}.")
    if path.is_dir():
        raise UsageError(f"{path} is a folder. Name a file with --out.")
    if path.exists():
        with path.open("rb") as file:
            ours = f'content="{GENERATOR}"'.encode() in file.read(1000)
        if not ours:
            raise UsageError(f"{path} is there and is no report of lattice-census. Name another file with --out.")


def report_html(connection: duckdb.DuckDBPyConnection) -> str:
    """The page."""
    facts = read_facts(connection)
    with matplotlib.rc_context(style()):  # type: ignore[arg-type]
        sections = [
            ("summary", "Summary", summary_html(facts)),
            ("lattice-types", "Lattice types by source", types_html(facts)),
            ("map", "Map of the lattices", map_html(facts)),
            ("sizes", "Given against primitive size", sizes_html(facts)),
            ("tolerance", "Families against tolerance", tolerance_html(facts)),
            ("groups", "Groups", groups_html(facts.groups) if facts.groups else ungrouped()),
            ("pairs", "Kept and set aside, laid over each other",
             pairs_html(connection, facts.groups) if facts.groups else ungrouped()),
            ("findings", "Findings and holds", findings_html(facts)),
            ("leakage", "Leakage between splits", leakage_html(facts)),
            ("refusals", "Refusals", refusals_html(facts)),
            ("settings", "Settings and versions", settings_html(facts)),
            ("cautions", "Cautions", "<ul>" + "".join(f"<li>{paragraph(c)}</li>" for c in CAUTIONS) + "</ul>"),
        ]  # fmt: skip
    runs = facts.status["runs"]
    state = "No run has written to the store."
    if runs:
        state = f"As of run {runs[0]['run']} ({runs[0]['command']}), {str(runs[0]['started_at'])[:19]} UTC."
    return page("Report on a collection of crystal structures", f"{state} lattice-census {__version__}.", sections)
