"""The order in which records are kept: a total order from pins, record content and the keep rules alone."""

from __future__ import annotations

import duckdb

from ..settings import Settings

# Each rule as terms of ORDER BY, best first. Energies are compared within one theory alone, which a total order can
# only do by putting the theories one after the other; so `energy` sorts by the name of the theory before the energy.
# A record without what a rule asks for comes after those that have it.
_TERMS = {
    "theory": ("coalesce(list_position($theories, r.theory), 1000000000)",),
    "energy": ("r.energy_ev_per_site IS NULL", "r.theory NULLS LAST", "r.energy_ev_per_site"),
    "symmetry": ("t.point_group_order DESC NULLS LAST",),
    "sites": ("r.sites_given",),
    "date": ("r.record_date DESC NULLS LAST",),
    "source": ("coalesce(list_position($sources, r.source), 1000000000)",),
}

# What two records must have equal for a rule to pass them on to the next one.
_VALUES = {
    "theory": _TERMS["theory"][0],
    "energy": "{'missing': r.energy_ev_per_site IS NULL, 'theory': r.theory, 'energy': r.energy_ev_per_site}",
    "symmetry": "t.point_group_order",
    "sites": "r.sites_given",
    "date": "r.record_date",
    "source": _TERMS["source"][0],
}

_PINNED = "(SELECT DISTINCT record_id FROM pins_in_force WHERE kind = 'keep')"
_RECORDS = (
    "FROM current_records r JOIN canonical_forms f USING (record_id) LEFT JOIN crystal_types t USING (crystal_key) "
    f"LEFT JOIN {_PINNED} p ON p.record_id = r.record_id"
)


def rank_records(
    connection: duckdb.DuckDBPyConnection, settings: Settings, within: str | None = None, by: str = "composition"
) -> None:
    """Make the temporary table `ranks` (record_id, rank from 1) of all current records.

    within: a table of compositions, or of record ids, as `by` says; only their records are ranked, in the same order.

    Records pinned to be kept come first; then the rules are applied in their order; the record id comes last, so that
    no two records have one rank. When a record arrived has no part in it: the same records have the same ranks however
    they came.
    """
    terms = ["p.record_id IS NULL", *(term for rule in settings.keep_rules for term in _TERMS[rule])]
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE ranks AS "
        f"SELECT r.record_id, row_number() OVER (ORDER BY {', '.join([*terms, 'r.record_id'])}) AS rank {_RECORDS}"
        + (f" WHERE r.{by} IN (SELECT {by} FROM {within})" if within else ""),
        _bound(settings, terms),
    )


def deciding_rules(connection: duckdb.DuckDBPyConnection, settings: Settings, pairs: str) -> None:
    """Make the temporary table `deciding_rules` (record_id, kept_record_id, rule) for pairs of current records.

    pairs: a query of record_id and kept_record_id. The rule is the first whose value differs between the two: `pin`, a
    keep rule, `theory_name` where energies of two levels of theory cannot be compared and their names decide, or
    `record_id`.
    """
    values = ["p.record_id IS NOT NULL AS pin", *(f"{_VALUES[rule]} AS {rule}" for rule in settings.keep_rules)]
    cases = ["WHEN a.pin <> b.pin THEN 'pin'"]
    for rule in settings.keep_rules:
        if rule == "energy":
            cases.append(
                "WHEN NOT a.energy.missing AND NOT b.energy.missing AND a.energy.theory IS DISTINCT FROM "
                "b.energy.theory THEN 'theory_name'"
            )
            cases.append("WHEN a.energy.missing AND b.energy.missing AND a.energy.theory IS DISTINCT FROM "
                         "b.energy.theory THEN 'theory_name'")  # fmt: skip
        cases.append(f"WHEN a.{rule} IS DISTINCT FROM b.{rule} THEN '{rule}'")
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE deciding_rules AS "
        f"WITH pairs AS ({pairs}), told AS (SELECT r.record_id, {', '.join(values)} {_RECORDS} WHERE r.record_id IN "
        "(SELECT record_id FROM pairs UNION SELECT kept_record_id FROM pairs)) "
        f"SELECT c.record_id, c.kept_record_id, CASE {' '.join(cases)} ELSE 'record_id' END AS rule FROM pairs c "
        "JOIN told a ON a.record_id = c.record_id JOIN told b ON b.record_id = c.kept_record_id",
        _bound(settings, values),
    )


def _bound(settings: Settings, texts: list[str]) -> dict[str, list[str]]:
    values = {"theories": list(settings.theory_preference), "sources": list(settings.source_preference)}
    return {name: value for name, value in values.items() if any(f"${name}" in text for text in texts)}
