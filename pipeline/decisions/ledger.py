"""The ledger of records set aside: decisions are added, superseded, undone and lapse; no row is ever taken away.

A decision says that a record is set aside, at a grade, in favour of the kept record of its group. It stays in force
until a later run of `keep` decides otherwise, a curator takes it back, or the two records are no longer what was
decided on.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import duckdb

from ..errors import UsageError
from ..grouping.rank import deciding_rules
from ..ingest.withdraw import NOT_CURRENT, user_name
from ..settings import Settings
from ..store.find import find_record
from ..store.rows import one_number, one_row
from ..store.transaction import transaction
from .holds import make_holds


@dataclass(frozen=True, slots=True)
class KeepPlan:
    """What a run of `keep` is to change; the rows stand in temporary tables."""

    grade: str
    new: int
    superseded: int
    lapsed: int
    held: int
    """Records that would be set aside, but are held."""

    in_force: int
    """Decisions of the grade in force before."""

    digest: str
    """Of all rows: tells an interrupted run that is to be taken up again."""

    @property
    def nothing(self) -> bool:
        """True where nothing changes."""
        return not (self.new or self.superseded or self.lapsed)


def default_grade(connection: duckdb.DuckDBPyConnection) -> str:
    """`near` where it was computed, else `key`. Read-only."""
    return "near" if has_grade(connection, "near") else "key"


def has_grade(connection: duckdb.DuckDBPyConnection, grade: str) -> bool:
    """True where groups of the grade were computed, also where they wait to be computed anew. Read-only."""
    found = one_row(
        connection,
        "SELECT 1 FROM (SELECT grade FROM members UNION ALL SELECT grade FROM outdated_members) WHERE grade = ? "
        "LIMIT 1",
        [grade],
    )
    return found is not None


def require_grade(connection: duckdb.DuckDBPyConnection, grade: str) -> None:
    """UsageError naming the grades there are, unless groups of the grade were computed. Read-only."""
    if not has_grade(connection, grade):
        rows = connection.execute("SELECT DISTINCT grade FROM members ORDER BY grade").fetchall()
        if not rows:
            raise UsageError("The store holds no records yet. Read some with: lattice-census ingest PATH")
        grades = ", ".join(g for (g,) in rows)
        raise UsageError(
            f"The store has no groups of grade {grade!r}; it has: {grades}. `lattice-census group` makes same and near."
        )


# The rows of the view `repeats` that are wanted. Asked for some, the view is made for all: no condition gets below its
# choice of a reason.
_NEW = (
    "WITH new AS (SELECT * FROM keep_state WHERE free AND NOT kept AND kept_record_id IS DISTINCT FROM group_id), "
    "told AS (SELECT f.record_id, f.crystal_key, f.supercell_index, r.content_hash, s.cell_angstrom "
    "FROM canonical_forms f JOIN records r USING (record_id) JOIN structures s USING (record_id) "
    "WHERE f.record_id IN (SELECT record_id FROM new UNION SELECT group_id FROM new)) "
    "SELECT $grade AS grade, n.record_id, n.group_id AS kept_record_id, n.witness_shift_angstrom, n.witness_strain, "
    "CASE WHEN x.crystal_key = y.crystal_key THEN equal_key_reason(x.content_hash, y.content_hash, x.supercell_index, "
    "y.supercell_index, x.cell_angstrom, y.cell_angstrom) ELSE w.reason END AS reason "
    "FROM new n JOIN told x ON x.record_id = n.record_id JOIN told y ON y.record_id = n.group_id LEFT JOIN matches w "
    "ON least(w.crystal_key_a, w.crystal_key_b) = least(x.crystal_key, y.crystal_key) "
    "AND greatest(w.crystal_key_a, w.crystal_key_b) = greatest(x.crystal_key, y.crystal_key)"
)


def plan_keep(
    connection: duckdb.DuckDBPyConnection, settings: Settings, grade: str, again: Sequence[str] = ()
) -> KeepPlan:
    """Make the temporary tables `keep_new` and `keep_ended` of what is to be decided at a grade, from `keep_state`: the
    records that are not kept or that a decision in force is about, with that decision, and whether nothing holds them.

    again: ids of held records that may be decided again. Raises UsageError where the store has no groups of the grade.
    """
    require_grade(connection, grade)
    free = (
        "m.group_id NOT IN (SELECT group_id FROM holds WHERE grade = $grade AND group_id IS NOT NULL) AND (m.record_id "
        "NOT IN (SELECT record_id FROM holds WHERE grade = $grade AND record_id IS NOT NULL) "
        "OR list_contains($again, m.record_id))"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE keep_state AS SELECT m.record_id, m.group_id, m.kept, d.decision_id, "
        f"d.kept_record_id, m.witness_shift_angstrom, m.witness_strain, {free} AS free FROM members m "
        "LEFT JOIN (SELECT * FROM decisions_in_force WHERE grade = $grade) d USING (record_id) "
        "WHERE m.grade = $grade AND (NOT m.kept OR d.record_id IS NOT NULL)",
        {"grade": grade, "again": list(again)},
    )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE keep_new AS {_NEW}", {"grade": grade})
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE keep_ended AS SELECT decision_id, record_id, kept_record_id, "
        "CASE WHEN kept THEN 'lapsed' ELSE 'superseded' END AS ending "
        "FROM keep_state WHERE free AND group_id <> kept_record_id"
    )
    deciding_rules(connection, settings, "SELECT record_id, kept_record_id FROM keep_new")
    ended = dict(connection.execute("SELECT ending, count(*) FROM keep_ended GROUP BY ending").fetchall())
    told = one_row(
        connection,
        "SELECT sha256(coalesce(string_agg(record_id || kept_record_id || ending, '' "
        "ORDER BY record_id, kept_record_id, ending), '')) FROM ("
        "SELECT record_id, kept_record_id, '' AS ending FROM keep_new UNION ALL "
        "SELECT record_id, kept_record_id, ending FROM keep_ended)",
    )
    return KeepPlan(
        grade,
        one_number(connection, "SELECT count(*) FROM keep_new") - ended.get("superseded", 0),
        ended.get("superseded", 0),
        ended.get("lapsed", 0),
        one_number(
            connection,
            "SELECT count(*) FROM keep_state WHERE NOT free AND NOT kept AND decision_id IS NULL",
        ),
        one_number(connection, "SELECT count(*) FROM decisions_in_force WHERE grade = ?", [grade]),
        f"keep {grade} {' '.join(sorted(again))} {told[0] if told else ''}",
    )


def planned_rows(connection: duckdb.DuckDBPyConnection, grade: str) -> list[dict[str, Any]]:
    """What `plan_keep` found, a row a record: what would change, for which kept record, and why. Read-only."""
    cursor = connection.execute(
        "FROM (SELECT CASE WHEN e.record_id IS NULL THEN 'set aside' ELSE 'set aside for another' END AS change, "
        "n.record_id, r.source || ':' || r.label AS record, n.kept_record_id, k.source || ':' || k.label AS kept, "
        "g.rule, n.reason, n.witness_shift_angstrom AS shift_angstrom, n.witness_strain AS strain "
        "FROM keep_new n JOIN deciding_rules g USING (record_id, kept_record_id) JOIN records r USING (record_id) "
        "JOIN records k ON k.record_id = n.kept_record_id LEFT JOIN keep_ended e ON e.record_id = n.record_id "
        "UNION ALL SELECT 'kept again', e.record_id, r.source || ':' || r.label, e.kept_record_id, "
        "k.source || ':' || k.label, NULL, NULL, NULL, NULL FROM keep_ended e JOIN records r USING (record_id) "
        "JOIN records k ON k.record_id = e.kept_record_id WHERE e.ending = 'lapsed' "
        "UNION ALL SELECT 'held', m.record_id, m.source || ':' || m.label, m.group_id, k.source || ':' || k.label, "
        "h.reason, h.message, m.witness_shift_angstrom, m.witness_strain "
        "FROM members m JOIN records k ON k.record_id = m.group_id JOIN holds h ON h.grade = m.grade "
        "AND (h.group_id = m.group_id OR h.record_id = m.record_id) "
        "WHERE m.grade = ? AND m.record_id IN "
        "(SELECT record_id FROM keep_state WHERE NOT free AND NOT kept AND decision_id IS NULL)) "
        "ORDER BY list_position(['set aside', 'set aside for another', 'kept again', 'held'], change), record, "
        "record_id, kept, rule, reason",
        [grade],
    )
    names = [d[0] for d in cursor.description or []]
    return [dict(zip(names, row, strict=True)) for row in cursor.fetchall()]


def decide(connection: duckdb.DuckDBPyConnection, run_id: int, plan: KeepPlan, note: str | None) -> None:
    """Write the planned decisions; inside the caller's transaction, right after `plan_keep`."""
    connection.execute(
        "UPDATE decisions SET undone_by_run = ?, ending = e.ending FROM keep_ended e "
        "WHERE decisions.decision_id = e.decision_id",
        [run_id],
    )
    connection.execute(
        "INSERT INTO decisions SELECT (SELECT coalesce(max(decision_id), 0) FROM decisions) "
        "+ row_number() OVER (ORDER BY n.record_id), n.record_id, n.kept_record_id, n.grade, g.rule, n.reason, "
        "n.witness_shift_angstrom, n.witness_strain, ?, now() AT TIME ZONE 'UTC', ?, ?, NULL, NULL, NULL "
        "FROM keep_new n JOIN deciding_rules g USING (record_id, kept_record_id) ORDER BY n.record_id",
        [run_id, user_name(), note],
    )


def release(connection: duckdb.DuckDBPyConnection, run_id: int, records: Sequence[str], grade: str) -> None:
    """Let `keep` decide again on records whose decisions were taken back; inside the caller's transaction."""
    connection.execute(
        "UPDATE decisions SET released_by_run = ? WHERE ending = 'undone' AND released_by_run IS NULL AND grade = ? "
        "AND list_contains(?, record_id)",
        [run_id, grade, list(records)],
    )


def held_records(connection: duckdb.DuckDBPyConnection, texts: Sequence[str], grade: str) -> list[str]:
    """The ids of records that an undone decision holds. Read-only; UsageError for one that is not held."""
    ids = []
    for text in texts:
        record = find_record(connection, text)
        if not one_row(
            connection,
            "SELECT 1 FROM decisions WHERE record_id = ? AND grade = ? AND ending = 'undone' "
            "AND released_by_run IS NULL",
            [record, grade],
        ):
            raise UsageError(f"--again {text}: no decision about it at grade {grade} was taken back.")
        ids.append(record)
    return ids


def lapse(connection: duckdb.DuckDBPyConnection, run_id: int) -> int:
    """End the decisions whose records are no longer there, have another structure, or are pinned apart now.

    Inside the caller's transaction; returns how many.
    """
    either = " UNION ".join(
        f"SELECT d.decision_id FROM decisions_in_force d JOIN gone g ON g.record_id = d.{record} "
        f"UNION SELECT d.decision_id FROM decisions_in_force d JOIN newer n ON n.record_id = d.{record} "
        "WHERE n.content_run > d.run_id"
        for record in ("record_id", "kept_record_id")
    )
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE lapsing AS WITH gone AS {NOT_CURRENT}, "
        "newer AS (SELECT record_id, content_run FROM records "
        "WHERE content_run > (SELECT min(run_id) FROM decisions_in_force)) "
        f"{either} UNION SELECT d.decision_id FROM decisions_in_force d JOIN pins_in_force p ON p.kind = 'apart' "
        "AND p.record_id = least(d.record_id, d.kept_record_id) "
        "AND p.other_record_id = greatest(d.record_id, d.kept_record_id)"
    )
    connection.execute(
        "UPDATE decisions SET undone_by_run = ?, ending = 'lapsed' "
        "WHERE decision_id IN (SELECT decision_id FROM lapsing)",
        [run_id],
    )
    return one_number(connection, "SELECT count(*) FROM lapsing")


def undo_decisions(connection: duckdb.DuckDBPyConnection, run_id: int, what: str) -> int:
    """Take back the decisions in force of a run (by number) or about a record; inside the caller's transaction.

    The records are held from then on. Returns how many decisions it were.
    """
    if what.isdigit() and len(what) < 20:
        condition, value = "run_id = ?", what
    else:
        condition, value = "record_id = ?", find_record(connection, what)
    where = f"undone_by_run IS NULL AND {condition}"
    count = one_number(connection, f"SELECT count(*) FROM decisions WHERE {where}", [value])
    connection.execute(f"UPDATE decisions SET undone_by_run = ?, ending = 'undone' WHERE {where}", [run_id, value])
    return count


def restore_ended(connection: duckdb.DuckDBPyConnection, run_id: int, of_run: int) -> int:
    """Decide again, in the same words, what a run that is taken back had superseded or let lapse.

    Only between records that are there and have had no other structure since, and that no newer decision is about.
    Inside the caller's transaction; returns how many.
    """
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE restored AS SELECT d.* FROM decisions d "
        "JOIN current_records r ON r.record_id = d.record_id JOIN current_records k ON k.record_id = d.kept_record_id "
        "WHERE d.undone_by_run = ? AND d.ending IN ('superseded', 'lapsed') "
        "AND r.content_run <= d.run_id AND k.content_run <= d.run_id "
        "AND NOT EXISTS (SELECT 1 FROM decisions_in_force o WHERE o.record_id = d.record_id AND o.grade = d.grade)",
        [of_run],
    )
    connection.execute(
        "INSERT INTO decisions SELECT (SELECT coalesce(max(decision_id), 0) FROM decisions) "
        "+ row_number() OVER (ORDER BY decision_id), record_id, kept_record_id, grade, rule, reason, "
        "witness_shift_angstrom, witness_strain, ?, now() AT TIME ZONE 'UTC', ?, note, NULL, NULL, NULL "
        "FROM restored ORDER BY decision_id",
        [run_id, user_name()],
    )
    return one_number(connection, "SELECT count(*) FROM restored")


def current_holds(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """Make `holds` anew outside of a transaction of the caller: the same rows wherever nothing changed."""
    with transaction(connection):
        make_holds(connection, settings)
