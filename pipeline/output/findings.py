"""What a curator must see, from the store: one SQL file in sql/findings/ a code, made anew by every run."""

from __future__ import annotations

from functools import cache
from importlib.resources import files

import duckdb

from ..decisions.holds import make_holds
from ..grouping.rank import rank_records
from ..settings import Settings


@cache
def finding_queries() -> dict[str, tuple[str, str]]:
    """By code: the sentence of the file's first line, and its query."""
    found = {}
    for entry in (files("lattice_census.sql") / "findings").iterdir():
        if entry.name.endswith(".sql"):
            text = entry.read_text(encoding="utf-8")
            found[entry.name.removesuffix(".sql")] = (text.split("\n", 1)[0].removeprefix("-- "), text)
    return dict(sorted(found.items()))


def find_all(connection: duckdb.DuckDBPyConnection, settings: Settings) -> dict[str, int]:
    """Make `holds` and `findings` anew, inside the caller's transaction; the number of each code that was met."""
    rank_records(connection, settings)
    make_holds(connection, settings)
    connection.execute("DELETE FROM findings")
    values = {"energy_conflict": settings.energy_conflict_ev_per_site}
    for _, query in finding_queries().values():
        used = {name: value for name, value in values.items() if f"${name}" in query}
        connection.execute(f"INSERT INTO findings {query} ORDER BY ALL", used)
    rows = connection.execute("SELECT code, count(*) FROM findings GROUP BY code ORDER BY code").fetchall()
    return dict(rows)
