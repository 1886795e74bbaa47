"""What a composition was grouped from, as one digest: its records, their keys and order, its pins, and the settings."""

from __future__ import annotations

import json

import duckdb

from ..ingest.withdraw import NOT_CURRENT
from ..settings import Settings

PAIR_PINS = (
    "(SELECT p.kind, p.pin_id, least(p.record_id, p.other_record_id) AS record_a, "
    "greatest(p.record_id, p.other_record_id) AS record_b, a.composition FROM pins_in_force p "
    "JOIN records a ON a.record_id = p.record_id JOIN records b ON b.record_id = p.other_record_id "
    "WHERE p.kind IN ('apart', 'together') AND a.composition = b.composition "
    f"AND p.record_id NOT IN (SELECT record_id FROM {NOT_CURRENT}) "
    f"AND p.other_record_id NOT IN (SELECT record_id FROM {NOT_CURRENT}) "
    "AND NOT EXISTS (SELECT 1 FROM pins_in_force q WHERE q.kind IN ('apart', 'together') AND q.kind <> p.kind "
    "AND least(q.record_id, q.other_record_id) = least(p.record_id, p.other_record_id) "
    "AND greatest(q.record_id, q.other_record_id) = greatest(p.record_id, p.other_record_id)))"
)
"""Query of the pins `apart` and `together` that take part: kind, pin_id, record_a < record_b, composition."""


def digest_compositions(
    connection: duckdb.DuckDBPyConnection, settings: Settings, within: str, everything: bool = False
) -> None:
    """The temporary table `changed_compositions` (composition, digest, records, keys, plain) of the compositions in
    the table `within` that have another digest than they were grouped with; temp.ranks holds their current records and
    no other record of theirs. Plain ones have one key and no pins, and need no comparison."""
    verify = json.dumps(settings.of_stage("verify") | settings.of_stage("canonical"), sort_keys=True)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE changed_compositions AS SELECT n.* FROM ("
        "SELECT r.composition, count(*) AS records, count(DISTINCT r.crystal_key) AS keys, "
        "count(DISTINCT r.crystal_key) = 1 AND any_value(p.pins) IS NULL AS plain, "
        "sha256($settings || string_agg(r.record_id || r.crystal_key || r.place, '' ORDER BY r.record_id) "
        "|| coalesce(any_value(p.pins), '')) AS digest "
        "FROM (SELECT i.composition, i.record_id, f.crystal_key, "
        "row_number() OVER (PARTITION BY i.composition ORDER BY k.rank) AS place "
        "FROM ranks k JOIN records i USING (record_id) JOIN canonical_forms f USING (record_id) "
        f"WHERE i.composition IN (SELECT composition FROM {within})) r "
        "LEFT JOIN (SELECT composition, string_agg(kind || pin_id || record_a || record_b, '' ORDER BY pin_id) AS pins "
        f"FROM {PAIR_PINS} GROUP BY composition) p ON p.composition = r.composition GROUP BY r.composition) n "
        "LEFT JOIN grouped_compositions g USING (composition) "
        "WHERE $everything OR g.digest IS DISTINCT FROM n.digest",
        {"settings": verify, "everything": everything},
    )
