"""What an export keeps and what it sets aside: by the ledger of decisions, now or as it stood after an earlier run.

A record is set aside where a decision about it is in force at the grade, and none is about the kept record that the
decision names. Everything else that takes part in results is kept: held records and groups, records whose decision was
taken back, and records that `keep` has not looked at yet. So kept + set aside = records that take part.
"""

from __future__ import annotations

from dataclasses import dataclass

import duckdb
import numpy as np
import polars as pl

from ..decisions.ledger import default_grade, require_grade
from ..errors import UsageError
from ..lattice.layer import areas
from ..model.batch import batch_from_lists
from ..model.species import formulas_of
from ..store.rows import one_number, one_row


@dataclass(frozen=True, slots=True)
class Selection:
    """What was chosen; the rows stand in the temporary tables `then_records`, `then_structures` and `then_aside`."""

    grade: str
    basis: str
    """decisions; or groups, where no decision was ever made at the grade."""

    notes: tuple[str, ...]


def select_records(connection: duckdb.DuckDBPyConnection, grade: str | None, as_of: int | None) -> Selection:
    """Make the temporary tables of what takes part and what is set aside. Raises UsageError (no such grade or run)."""
    grade = grade or default_grade(connection)
    require_grade(connection, grade)
    if as_of is None:
        _records_now(connection)
    else:
        if not one_row(connection, "SELECT 1 FROM runs WHERE run_id = ?", [as_of]):
            raise UsageError(f"--as-of {as_of}: the store has no run of that number; `ask runs` lists them.")
        _records_then(connection, as_of)
    run = as_of if as_of is not None else one_number(connection, "SELECT max(run_id) FROM runs")
    made = one_number(connection, "SELECT count(*) FROM decisions WHERE grade = ? AND run_id <= ?", [grade, run])
    if made or as_of is not None:
        _set_aside_by_decisions(connection, grade, run)
        note = () if made else (f"No decision had been made at grade {grade} by run {run}: every record is kept.",)
        return Selection(grade, "decisions", note)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE then_aside AS SELECT record_id, kept_record_id, reason, witness_shift_angstrom, "
        "witness_strain, NULL::VARCHAR AS rule, NULL::VARCHAR AS note, NULL::BIGINT AS decided_in_run "
        "FROM repeats WHERE grade = $grade "
        "AND kept_record_id NOT IN (SELECT group_id FROM holds WHERE grade = $grade AND group_id IS NOT NULL)",
        {"grade": grade},
    )
    return Selection(
        grade,
        "groups",
        (
            f"No decisions exist at grade {grade}: the kept records of its groups were taken. `keep` makes decisions, "
            "which can be looked at and taken back.",
        ),
    )


_FACTS = (
    "r.record_id, r.source, r.label, r.file, r.reader, r.position, r.formula, r.sites_given, r.sites_primitive, "
    "r.periodicity, f.crystal_key, f.volume_angstrom3_per_site, f.area_angstrom2_per_site, r.energy_ev_per_site, "
    "r.theory, r.split, r.properties"
)


def _records_now(connection: duckdb.DuckDBPyConnection) -> None:
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE then_records AS SELECT {_FACTS}, false AS earlier FROM current_records r "
        "JOIN canonical_forms f USING (record_id)"
    )
    connection.execute("CREATE OR REPLACE TEMP VIEW then_structures AS SELECT * FROM structures")


def _records_then(connection: duckdb.DuckDBPyConnection, run: int) -> None:
    """Records that took part after a run, in the state they had: that of `record_versions` where it is not today's.

    A record that was missing from its file after that run, and is back by now, counts as there: the store keeps the
    last absence alone.
    """
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE then_versions AS SELECT * FROM record_versions WHERE ended_by_run > $run "
        "QUALIFY row_number() OVER (PARTITION BY record_id ORDER BY version) = 1",
        {"run": run},
    )
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE then_records AS SELECT {_FACTS}, false AS earlier FROM records r "
        "JOIN canonical_forms f USING (record_id) "
        "WHERE r.first_run <= $run AND (r.missing_since_run IS NULL OR r.missing_since_run > $run) "
        "AND NOT EXISTS (SELECT 1 FROM withdrawals w WHERE w.run_id <= $run "
        "AND (w.undone_by_run IS NULL OR w.undone_by_run > $run) "
        "AND (w.record_id = r.record_id OR w.source = r.source))",
        {"run": run},
    )
    connection.execute(
        "CREATE OR REPLACE TEMP VIEW then_structures AS SELECT s.* FROM structures s "
        "WHERE record_id NOT IN (SELECT record_id FROM then_versions) UNION ALL "
        "SELECT record_id, cell_angstrom, species, positions_fractional FROM then_versions"
    )
    connection.execute(
        "UPDATE then_records SET earlier = true, crystal_key = v.crystal_key, "
        "energy_ev_per_site = v.energy_ev_per_site, theory = v.theory, split = v.split, properties = v.properties "
        "FROM then_versions v WHERE then_records.record_id = v.record_id"
    )
    frame = connection.sql(
        "SELECT record_id, cell_angstrom, species, positions_fractional FROM then_versions WHERE change = 'replaced' "
        "ORDER BY record_id"
    ).pl()
    if not len(frame):
        return
    batch = batch_from_lists(
        [np.array(cell).reshape(3, 3) for cell in frame["cell_angstrom"]],
        [np.array(positions).reshape(-1, 3) for positions in frame["positions_fractional"]],
        [list(species) for species in frame["species"]],
    )
    sites = np.diff(batch.offsets)
    replaced = pl.DataFrame(
        {
            "record_id": frame["record_id"],
            "formula": [described.formula for described in formulas_of(batch)],
            "sites": sites,
            "volume": batch.volumes / sites,
            "area": areas(batch.cells) / sites,
        }
    )
    connection.register("replaced_frame", replaced.to_arrow())
    connection.execute(
        "UPDATE then_records SET formula = p.formula, sites_given = p.sites, sites_primitive = NULL, "
        "volume_angstrom3_per_site = CASE WHEN then_records.periodicity = 3 THEN p.volume END, "
        "area_angstrom2_per_site = CASE WHEN then_records.periodicity = 2 THEN p.area END "
        "FROM replaced_frame p WHERE then_records.record_id = p.record_id"
    )
    connection.unregister("replaced_frame")


def _set_aside_by_decisions(connection: duckdb.DuckDBPyConnection, grade: str, run: int) -> None:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE then_aside AS WITH standing AS (SELECT d.* FROM decisions d "
        "WHERE d.grade = $grade AND d.run_id <= $run AND (d.undone_by_run IS NULL OR d.undone_by_run > $run) "
        "AND d.record_id IN (SELECT record_id FROM then_records) "
        "AND d.kept_record_id IN (SELECT record_id FROM then_records)) "
        "SELECT record_id, kept_record_id, reason, witness_shift_angstrom, witness_strain, rule, note, "
        "run_id AS decided_in_run FROM standing WHERE kept_record_id NOT IN (SELECT record_id FROM standing)",
        {"grade": grade, "run": run},
    )


def kept_rows(
    connection: duckdb.DuckDBPyConnection, selection: Selection, where: str | None, earlier: bool = False
) -> pl.DataFrame:
    """The kept records, in the order of source, file and place; `held` says why a record waits for a curator.

    earlier: the selection is that of an earlier run.
    where: a condition in SQL on the columns of kept.csv, of `records` and of `crystals`. It is parsed as one
    expression, and nothing but that reaches the database. Raises UsageError for anything else.
    """
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE then_kept AS SELECT r.* EXCLUDE (properties, earlier), "
        "1 + coalesce(a.number, 0) AS group_size, h.held FROM then_records r "
        "LEFT JOIN (SELECT kept_record_id, count(*) AS number FROM then_aside GROUP BY kept_record_id) a "
        "ON a.kept_record_id = r.record_id "
        "LEFT JOIN (SELECT m.record_id, string_agg(DISTINCT h.reason || ': ' || h.message, '; ' ORDER BY h.reason || "
        "': ' || h.message) AS held FROM members m JOIN holds h ON h.grade = m.grade AND (h.group_id = m.group_id "
        "OR h.record_id = m.record_id) WHERE m.grade = $grade GROUP BY m.record_id) h ON h.record_id = r.record_id "
        "WHERE r.record_id NOT IN (SELECT record_id FROM then_aside)",
        {"grade": selection.grade},
    )
    if earlier:  # holds are those of today
        connection.execute("UPDATE then_kept SET held = NULL")
    kept = connection.sql("SELECT * FROM then_kept")
    if where is not None:
        wide = connection.sql(_wide(connection))
        try:
            found = wide.filter(duckdb.SQLExpression(where)).select("record_id").fetchall()
        except (duckdb.Error, ValueError) as error:
            raise UsageError(
                f"--where {where}: this is no condition on the columns of kept.csv, records and crystals. "
                f"{str(error).strip().splitlines()[0]}"
            ) from error
        ids = pl.DataFrame({"record_id": [record for (record,) in found]}, schema={"record_id": pl.String})
        connection.register("where_frame", ids.to_arrow())
        connection.execute(
            "CREATE OR REPLACE TEMP TABLE then_kept AS SELECT * FROM then_kept "
            "WHERE record_id IN (SELECT record_id FROM where_frame)"
        )
        connection.unregister("where_frame")
        kept = connection.sql("SELECT * FROM then_kept")
    frame: pl.DataFrame = kept.order("source, file, position, record_id").pl()
    return frame


def _wide(connection: duckdb.DuckDBPyConnection) -> str:
    """A query of the kept records with every column that a condition may name; each name once."""
    taken: set[str] = set()
    chosen = []
    for table, short in (("then_kept", "k"), ("records", "r"), ("crystals", "c")):
        for (name,) in connection.execute(
            "SELECT column_name FROM duckdb_columns() WHERE table_name = ? ORDER BY column_index", [table]
        ).fetchall():
            if name not in taken:
                taken.add(name)
                chosen.append(f'{short}."{name}"')
    return (
        f"SELECT {', '.join(chosen)} FROM then_kept k JOIN records r ON r.record_id = k.record_id "
        "JOIN crystals c ON c.record_id = k.record_id"
    )


def aside_rows(connection: duckdb.DuckDBPyConnection) -> pl.DataFrame:
    """The records set aside in favour of a kept one that is exported, after `kept_rows`: why, and how far off."""
    frame: pl.DataFrame = connection.sql(
        "SELECT a.record_id, r.source, r.label, r.file, r.position, a.kept_record_id, k.source AS kept_source, "
        "k.label AS kept_label, a.reason, a.witness_shift_angstrom AS shift_angstrom, a.witness_strain AS strain, "
        "a.rule, a.note, a.decided_in_run FROM then_aside a JOIN then_records r USING (record_id) "
        "JOIN then_kept k ON k.record_id = a.kept_record_id ORDER BY r.source, r.file, r.position, a.record_id"
    ).pl()
    return frame
