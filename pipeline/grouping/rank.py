"""The order in which records are kept: a total order from record content and the keep rules alone."""

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


def rank_records(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """Make the temporary table `ranks` (record_id, rank from 1) of all current records.

    The rules are applied in their order; the record id comes last, so that no two records have one rank. When a record
    arrived has no part in it: the same records have the same ranks however they came.
    """
    terms = [term for rule in settings.keep_rules for term in _TERMS[rule]]
    values = {"theories": list(settings.theory_preference), "sources": list(settings.source_preference)}
    used = {name: value for name, value in values.items() if any(f"${name}" in term for term in terms)}
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE ranks AS "
        f"SELECT r.record_id, row_number() OVER (ORDER BY {', '.join([*terms, 'r.record_id'])}) AS rank "
        "FROM current_records r JOIN canonical_forms f USING (record_id) LEFT JOIN crystal_types t USING (crystal_key)",
        used,
    )
