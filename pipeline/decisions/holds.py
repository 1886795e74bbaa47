"""Holds: groups and records that `keep` leaves alone until a curator has looked."""

from __future__ import annotations

import duckdb

from ..ingest.withdraw import NOT_CURRENT
from ..settings import Settings

_NAME = "r.source || ':' || r.label"

# Energies of one theory in one group that lie too far apart: until that is understood, none of them is the lowest. A
# curator who pins the record to keep has decided.
_ENERGY_CONFLICT = (
    "SELECT grade, group_id, NULL, 'energy_conflict', "
    "string_agg(message, '; ' ORDER BY theory NULLS LAST) FROM ("
    "SELECT m.grade, m.group_id, r.theory, format('energies of {} spread over {:.4f} eV per site', "
    "coalesce(r.theory, 'one theory without a name'), max(r.energy_ev_per_site) - min(r.energy_ev_per_site)) "
    "AS message "
    "FROM members m JOIN records r USING (record_id) WHERE r.energy_ev_per_site IS NOT NULL "
    "AND m.group_id NOT IN (SELECT record_id FROM pins_in_force WHERE kind = 'keep') "
    "AND m.group_id IN (SELECT group_id FROM members WHERE NOT kept) "  # most groups are of one record
    "GROUP BY m.grade, m.group_id, r.theory "
    "HAVING max(r.energy_ev_per_site) - min(r.energy_ev_per_site) > $limit) GROUP BY grade, group_id"
)

_TWO_KEPT = (
    "SELECT m.grade, m.group_id, NULL, 'pin_conflict', 'several records of one group are pinned to be kept: ' || "
    f"string_agg(format('pin {{}} keeps {{}} ({{}})', p.pin_id, {_NAME}, p.reason), '; ' ORDER BY p.pin_id) "
    "FROM members m JOIN pins_in_force p ON p.kind = 'keep' AND p.record_id = m.record_id "
    "JOIN records r ON r.record_id = m.record_id GROUP BY m.grade, m.group_id HAVING count(*) > 1"
)

# Pinned both ways: neither pin takes part, and both records' groups are held.
_BOTH_WAYS = (
    "SELECT DISTINCT m.grade, m.group_id, NULL, 'pin_conflict', "
    "format('pin {} holds two records apart ({}) and pin {} together ({})', p.pin_id, p.reason, q.pin_id, q.reason) "
    "FROM pins_in_force p JOIN pins_in_force q ON p.kind = 'apart' AND q.kind = 'together' "
    "AND p.record_id = q.record_id AND p.other_record_id = q.other_record_id "
    "JOIN members m ON m.grade <> 'copy' AND m.record_id IN (p.record_id, p.other_record_id)"
)

# Two records pinned apart that both match a third one: it must not stand for both.
_APART_IN_ONE_GROUP = (
    "SELECT a.grade, a.group_id, NULL, 'pin_conflict', "
    "format('{} and {} are pinned apart (pin {}: {}), and both match {}', a.source || ':' || a.label, "
    "b.source || ':' || b.label, p.pin_id, p.reason, k.source || ':' || k.label) "
    "FROM pins_in_force p JOIN members a ON a.record_id = p.record_id "
    "JOIN members b ON b.record_id = p.other_record_id AND b.grade = a.grade AND b.group_id = a.group_id "
    "JOIN records k ON k.record_id = a.group_id "
    "WHERE p.kind = 'apart' AND NOT EXISTS (SELECT 1 FROM pins_in_force q WHERE q.kind = 'together' "
    "AND q.record_id = p.record_id AND q.other_record_id = p.other_record_id)"
)

_UNDONE = (
    "SELECT DISTINCT d.grade, NULL, d.record_id, 'undone', "
    "format('taken back in run {}; `keep --again` lets it be decided again', max(d.undone_by_run)) FROM decisions d "
    "WHERE d.ending = 'undone' AND d.released_by_run IS NULL "
    f"AND d.record_id NOT IN (SELECT record_id FROM {NOT_CURRENT}) GROUP BY d.grade, d.record_id"
)


def make_holds(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """Make `holds` anew from the members, pins and decisions; inside the caller's transaction."""
    connection.execute("DELETE FROM holds")
    connection.execute(
        f"INSERT INTO holds {_ENERGY_CONFLICT} ORDER BY ALL", {"limit": settings.energy_conflict_ev_per_site}
    )
    for query in (_TWO_KEPT, _BOTH_WAYS, _APART_IN_ONE_GROUP, _UNDONE):
        connection.execute(f"INSERT INTO holds {query} ORDER BY ALL")
