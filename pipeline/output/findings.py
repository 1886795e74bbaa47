"""What a curator must see, from the store: one SQL file in sql/findings/ a code, made anew by every run."""

from __future__ import annotations

from functools import cache
from importlib.resources import files

import duckdb

from ..decisions.holds import make_holds
from ..grouping.rank import rank_records
from ..settings import Settings
from ..store.rows import one_row
from ..store.transaction import transaction


@cache
def finding_queries() -> dict[str, tuple[str, str]]:
    """By code: the sentence of the file's first line, and its query."""
    found = {}
    for entry in (files("lattice_census.sql") / "findings").iterdir():
        if entry.name.endswith(".sql"):
            text = entry.read_text(encoding="utf-8")
            found[entry.name.removesuffix(".sql")] = (text.split("\n", 1)[0].removeprefix("-- "), text)
    return dict(sorted(found.items()))


def note_findings_due(connection: duckdb.DuckDBPyConnection) -> None:
    """Note that the findings are not those of the store any more; inside the caller's transaction."""
    connection.execute("DELETE FROM store_facts WHERE name = 'findings_due'")
    connection.execute("INSERT INTO store_facts VALUES ('findings_due', 'yes')")


def findings_due(connection: duckdb.DuckDBPyConnection) -> bool:
    """True where the store must not be published before `find_due`. Read-only."""
    return one_row(connection, "SELECT 1 FROM store_facts WHERE name = 'findings_due'") is not None


def find_due(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """`find_all` in a transaction of its own."""
    with transaction(connection):
        find_all(connection, settings)


_CHAINS = (
    "SELECT grade, family_id FROM members WHERE grade IN ('same', 'near') AND kept AND family_id IN "
    "(SELECT family_id FROM members WHERE grade IN ('same', 'near') AND kept AND record_id <> family_id) "
    "GROUP BY grade, family_id HAVING count(*) > 1"
)
"""Query of the families of several groups. Of two kept records one is not that with the smallest id."""

_RANKED = (
    "SELECT record_id FROM records WHERE split IS NOT NULL "
    "UNION SELECT record_id FROM members JOIN chains USING (grade, family_id)"
)
"""Query of the records that findings ask for by rank: those with splits or in chains."""


def find_all(connection: duckdb.DuckDBPyConnection, settings: Settings) -> dict[str, int]:
    """Make `holds` and `findings` anew, inside the caller's transaction; the number of each code that was met."""
    connection.execute(f"CREATE OR REPLACE TEMP TABLE chains AS {_CHAINS}")
    connection.execute(f"CREATE OR REPLACE TEMP TABLE to_rank AS {_RANKED}")
    rank_records(connection, settings, "to_rank", "record_id")
    make_holds(connection, settings)
    connection.execute("DELETE FROM store_facts WHERE name = 'findings_due'")
    connection.execute("DELETE FROM findings")
    values = {"energy_conflict": settings.energy_conflict_ev_per_site}
    for _, query in finding_queries().values():
        used = {name: value for name, value in values.items() if f"${name}" in query}
        connection.execute(f"INSERT INTO findings {query} ORDER BY ALL", used)
    rows = connection.execute("SELECT code, count(*) FROM findings GROUP BY code ORDER BY code").fetchall()
    return dict(rows)
