"""Whether a store holds what it promises: every invariant of sql/checks/, families, and an audit of the witnesses.

A file of sql/checks/ begins with the invariant as a sentence and is a query that must give no row. Nothing here is
repaired: what fails is damage, or a fault of the program.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any

import duckdb

from ..model.refusals import REASONS
from ..store.rows import one_number
from .check_groups import changed_since_grouped, kept_out_of_order
from .check_witnesses import audit_keys, audit_matches
from .tables import json_row

SHOWN = 5
"""So many of the rows that break an invariant are shown."""


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of one check."""

    name: str
    invariant: str
    """The sentence that has to hold."""

    failures: int
    """Rows that break it."""

    columns: tuple[str, ...]
    rows: tuple[tuple[Any, ...], ...]
    """The first of them, up to SHOWN."""

    examined: int | None = None
    """Of how many, where it is an audit of single witnesses."""

    of: int | None = None
    """How many there are, where it is an audit."""

    def as_json(self) -> dict[str, Any]:
        """Ready for json.dumps."""
        out: dict[str, Any] = {
            "check": self.name,
            "invariant": self.invariant,
            "holds": self.failures == 0,
            "failures": self.failures,
            "rows": [json_row(self.columns, row) for row in self.rows],
        }
        if self.examined is not None:
            out |= {"examined": self.examined, "of": self.of}
        return out


@cache
def check_queries() -> dict[str, tuple[str, str]]:
    """By name: the sentence of the comment that a file begins with, and its query."""
    found = {}
    for entry in (files("lattice_census.sql") / "checks").iterdir():
        if entry.name.endswith(".sql"):
            text = entry.read_text(encoding="utf-8")
            comment = []
            for line in text.splitlines():
                if not line.startswith("--"):
                    break
                comment.append(line.removeprefix("--").strip())
            found[entry.name.removesuffix(".sql")] = (" ".join(comment), text)
    return dict(sorted(found.items()))


def check_store(
    connection: duckdb.DuckDBPyConnection, sample: int, told: Callable[[Outcome], None] | None = None
) -> list[Outcome]:
    """Run every check over a published store, read-only; `told` is called with each outcome as it is known.

    sample: most witnesses that are audited, of matches and of equal keys each, chosen by a hash of their record ids.
    """
    _name_pinned(connection)
    outcomes: list[Outcome] = []

    def add(outcome: Outcome) -> None:
        outcomes.append(outcome)
        if told is not None:
            told(outcome)

    for name, (sentence, query) in check_queries().items():
        values = {"reasons": list(REASONS)} if "$reasons" in query else {}
        answer = connection.execute(query, values)
        columns = tuple(d[0] for d in answer.description or ())
        rows = sorted(answer.fetchall(), key=repr)
        add(Outcome(name, sentence, len(rows), columns, tuple(rows[:SHOWN])))
    for name, sentence, columns, found in (
        (
            "families-hang-together",
            "The keys of a family at grade same or near hang together by stored matches of that grade.",
            ("grade", "family_id", "parts"),
            unconnected_families,
        ),
        (
            "compositions-are-grouped-as-they-are",
            "A grouped composition has the records, keys, ranks and pins that it was grouped from.",
            ("composition", "records"),
            changed_since_grouped,
        ),
        (
            "kept-records-rank-first",
            "The kept record of a group of equal content or key is the best of it by the keep rules.",
            ("grade", "group_id", "record_id"),
            kept_out_of_order,
        ),
    ):
        rows = found(connection)
        add(Outcome(name, sentence, len(rows), columns, tuple(rows[:SHOWN])))
    for name, sentence, audit in (
        (
            "witnesses-of-matches",
            "The witness of a match, applied to the two structures as they came, gives the measures that are recorded.",
            audit_matches,
        ),
        (
            "witnesses-of-keys",
            "A record set aside for its key has the sites of its kept record, one to one by their site maps.",
            audit_keys,
        ),
    ):
        done = audit(connection, sample)
        wrong = done.failures
        columns = ("record_a", "record_b", "what_is_wrong")
        add(Outcome(name, sentence, len(wrong), columns, tuple(wrong[:SHOWN]), done.examined, done.of))
    return outcomes


def _name_pinned(connection: duckdb.DuckDBPyConnection) -> None:
    """The temporary view `pinned`: records that a curator holds apart from others or together with them.

    What is measured does not decide about these alone, and each stands for itself in `matches`.
    """
    there = one_number(connection, "SELECT count(*) FROM duckdb_tables() WHERE table_name = 'pins' AND NOT internal")
    pins = "SELECT * FROM pins WHERE kind IN ('apart', 'together') AND removed_by_run IS NULL"
    connection.execute(
        "CREATE OR REPLACE TEMP VIEW pinned AS "
        + (
            f"SELECT record_id FROM ({pins}) UNION SELECT other_record_id FROM ({pins})"
            if there
            else "SELECT record_id FROM records WHERE false"
        )
    )


def unconnected_families(connection: duckdb.DuckDBPyConnection) -> list[tuple[str, str, int]]:
    """(grade, family, number of parts) of every family that the stored matches do not hold together, but those with
    a record that is pinned. Read-only, after `_name_pinned`."""
    out = []
    for grade, labels in (("same", ["same"]), ("near", ["same", "near"])):
        family_of = dict(
            connection.execute(
                "SELECT DISTINCT f.crystal_key || ' ' || m.family_id, m.family_id FROM members m "
                "JOIN canonical_forms f USING (record_id) WHERE m.grade = $1 AND m.family_id IN (SELECT o.family_id "
                "FROM members o JOIN canonical_forms g USING (record_id) WHERE o.grade = $1 GROUP BY o.family_id "
                "HAVING count(DISTINCT g.crystal_key) > 1 AND count(*) FILTER (o.record_id IN "
                "(SELECT record_id FROM pinned)) = 0)",
                [grade],
            ).fetchall()
        )
        edges = connection.execute(
            "SELECT t.crystal_key_a || ' ' || a.family_id, t.crystal_key_b || ' ' || b.family_id FROM matches t "
            "JOIN members a ON a.record_id = t.record_a AND a.grade = $1 "
            "JOIN members b ON b.record_id = t.record_b AND b.grade = $1 "
            "WHERE list_contains($2, t.grade) AND a.family_id = b.family_id",
            [grade, labels],
        ).fetchall()
        parent = {node: node for node in family_of}
        for a, b in edges:
            if a in parent and b in parent:
                parent[_root(parent, a)] = _root(parent, b)
        parts: dict[str, set[str]] = {}
        for node, family in family_of.items():
            parts.setdefault(family, set()).add(_root(parent, node))
        out += [(grade, family, len(roots)) for family, roots in sorted(parts.items()) if len(roots) > 1]
    return out


def _root(parent: dict[str, str], node: str) -> str:
    while parent[node] != node:
        parent[node] = parent[parent[node]]
        node = parent[node]
    return node
