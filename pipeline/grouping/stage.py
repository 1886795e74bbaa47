"""The stage `group`: which compositions have changed, their work in the pool, and the rows it gives.

A composition is grouped from its current records, their keys, ranks and pins, and the settings alone; the digest of
these stands in `grouped_compositions`, so that only compositions whose digest changed are worked on, and a killed run
goes on with those that are left. Compositions with one key need no comparison and are written by SQL; of those to which
records were only added, pairs of old ones are not compared again.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import duckdb

from ..ingest.engine import Engine, done_in_order
from ..ingest.progress import Progress, Silent
from ..ingest.touched import STAGES, find_touched, grouped_until
from ..settings import Settings
from ..store.parts import Part
from ..store.rows import one_number
from ..store.transaction import transaction
from ..store.workspace import Workspace
from .additions import find_additions
from .digest import digest_compositions
from .former import any_gone, clear_former, find_former, forget_gone
from .jobs import jobs
from .outdated import GRADES, forget_outdated
from .rank import rank_records
from .replaced import replace_members
from .work import GroupJob, group_chunk, parts_of

LITTLE_WORK = 100_000
"""Possible pairs of keys that are compared before workers would have started."""


@dataclass(frozen=True, slots=True)
class GroupCounts:
    """What the stage did."""

    compositions: int
    """Compositions worked on."""

    compared: int
    """Pairs of keys compared site by site in this run."""

    matches: int
    """Rows of `matches`."""

    families: dict[str, int]
    """By grade."""

    groups: dict[str, int]
    """By grade."""

    set_aside: dict[str, int]
    """Records that are not kept, by grade."""


TOGETHER = 8
"""Jobs whose rows are written in one transaction where rows that are there are compared with them."""

AGAIN = "again_compositions"
"""Temporary table (composition) of those that must be compared as a whole after all."""


def group_records(
    workspace: Workspace,
    run_id: int,
    settings: Settings,
    pool: Engine,
    progress: Progress,
    everything: bool = False,
) -> GroupCounts:
    """Bring `matches` and the members of grades same and near up to date with the current records.

    The compositions to work on are those of temp.changed_compositions (find_changed); everything: they are all there
    are. What was grouped of one is replaced in the transaction that writes its digest.
    """
    connection = workspace.connection
    find_additions(connection, settings, everything)
    find_former(connection)
    connection.execute(f"CREATE OR REPLACE TEMP TABLE {AGAIN} (composition VARCHAR)")
    records = one_number(connection, "SELECT coalesce(sum(records), 0) FROM changed_compositions WHERE NOT plain")

    def without_comparison() -> None:
        with transaction(connection):
            forget_gone(connection, run_id)
            _write_single(connection, run_id)

    if not records:
        without_comparison()
    else:
        progress.start("comparing and grouping", records)
        _work_through(workspace, run_id, settings, pool, progress, "changed_compositions", without_comparison)
        if one_number(connection, f"SELECT count(*) FROM {AGAIN}"):
            for table in ("added_compositions", "old_records", "concerned_records"):
                connection.execute(f"DELETE FROM {table} WHERE composition IN (SELECT composition FROM {AGAIN})")
            _work_through(workspace, run_id, settings, pool, Silent(), AGAIN)
    with transaction(connection):
        forget_outdated(connection)
    return _counts(connection, run_id)


def _work_through(
    workspace: Workspace,
    run_id: int,
    settings: Settings,
    pool: Engine,
    progress: Progress,
    only: str,
    meanwhile: Callable[[], None] | None = None,
) -> None:
    """Have the compositions of a table worked on, and write what comes. meanwhile: done once while workers compare."""
    connection, manifest = workspace.connection, workspace.manifest
    pairs = one_number(connection, "SELECT sum(keys * keys) FROM changed_compositions WHERE keys > 1")
    few = 4 if pairs < LITTLE_WORK else 1
    settle = pairs >= LITTLE_WORK and workspace.mostly_in_log
    together = TOGETHER if one_number(connection, "SELECT count(*) FROM former_members") else 1
    held: list[GroupJob] = []

    def write() -> None:
        parts = [manifest.checked(job.part) for job in held]
        with transaction(connection):
            _commit(connection, parts, run_id)
        for job in held:
            job.raw.unlink()
            if job.known is not None:
                job.known.unlink()
            manifest.drop(job.part)
        held.clear()

    for job, _ in done_in_order(pool, group_chunk, jobs(workspace, settings, only), manifest, few):
        held.append(job)
        if meanwhile is not None:
            meanwhile()
            meanwhile = None
        if len(held) >= together:
            write()
        progress.advance(job.records)
        if settle:
            # What was read is worked into the file while workers compare: publishing waits for the rest alone.
            connection.execute("CHECKPOINT")
            settle = False
    if held:
        write()


def find_work(connection: duckdb.DuckDBPyConnection, settings: Settings, everything: bool = False) -> str | None:
    """`find_changed`, and the hash of what `group_records` would bring about, or None where nothing is to be done.

    It is that of the records as they were last noted and of the settings, and does not depend on how much is done
    already, so that an interrupted run is known by it.
    """
    stages = json.dumps([settings.of_stage(stage) for stage in STAGES], sort_keys=True)
    target = f"group {everything} {grouped_until(connection)} {hashlib.sha256(stages.encode()).hexdigest()}"
    unfinished = one_number(
        connection, "SELECT count(*) FROM runs WHERE status = 'running' AND plan_hash = ?", [target]
    )
    find_changed(connection, settings, everything)
    changed = one_number(connection, "SELECT count(*) FROM changed_compositions")
    return target if everything or unfinished or changed or any_gone(connection) else None


def _counts(connection: duckdb.DuckDBPyConnection, run_id: int) -> GroupCounts:
    rows = connection.execute(
        "SELECT grade, count(*) FILTER (record_id = family_id), count(*) FILTER (kept), count(*) FILTER (NOT kept) "
        "FROM members "
        f"WHERE grade IN {GRADES} GROUP BY grade ORDER BY grade DESC"
    ).fetchall()
    return GroupCounts(
        one_number(connection, "SELECT count(*) FROM grouped_compositions WHERE run_id = ?", [run_id]),
        one_number(connection, "SELECT sum(verified) FROM grouped_compositions WHERE run_id = ?", [run_id]),
        one_number(connection, "SELECT count(*) FROM matches"),
        {grade: families for grade, families, _, _ in rows},
        {grade: groups for grade, _, groups, _ in rows},
        {grade: aside for grade, _, _, aside in rows},
    )


def find_changed(connection: duckdb.DuckDBPyConnection, settings: Settings, everything: bool = False) -> None:
    """The temporary table `changed_compositions` of those that are not grouped as they are: those without a row in
    `grouped_compositions`, and of those that something happened to (temp.touched) the ones with another digest; or all
    of them."""
    find_touched(connection, settings)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE looked_at AS SELECT DISTINCT composition FROM current_records "
        "WHERE $everything OR composition NOT IN (SELECT composition FROM grouped_compositions) "
        "OR composition IN (SELECT composition FROM touched)",
        {"everything": everything},
    )
    rank_records(connection, settings, "looked_at")
    digest_compositions(connection, settings, "looked_at", everything)


def _write_single(connection: duckdb.DuckDBPyConnection, run_id: int) -> None:
    """Members of compositions with one key: one family and one group, kept by rank."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE done AS SELECT *, false AS added FROM changed_compositions WHERE plain"
    )
    clear_former(connection, "done")
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE now_members AS SELECT g.grade, first_value(r.record_id) OVER kept AS group_id, "
        "min(r.record_id) OVER family AS family_id, r.record_id, r.label, r.source, "
        "row_number() OVER kept = 1 AS kept, 0.0::DOUBLE AS witness_shift_angstrom, 0.0::DOUBLE AS witness_strain "
        f"FROM (SELECT unnest({list(GRADES)}) AS grade) g CROSS JOIN current_records r JOIN ranks k USING (record_id) "
        "WHERE r.composition IN (SELECT composition FROM done) "
        "WINDOW kept AS (PARTITION BY g.grade, r.composition ORDER BY k.rank), "
        "family AS (PARTITION BY g.grade, r.composition)"
    )
    replace_members(connection, run_id, GRADES)
    connection.execute(
        "INSERT INTO grouped_compositions SELECT composition, digest, ?, records, keys, 0, 0, NULL, NULL FROM done "
        "ORDER BY composition",
        [run_id],
    )


def _commit(connection: duckdb.DuckDBPyConnection, parts: Sequence[Part], run_id: int) -> None:
    matches, members, summary, dropped = (list(map(str, files)) for files in zip(*map(parts_of, parts), strict=True))
    connection.execute("CREATE OR REPLACE TEMP TABLE told AS SELECT * FROM read_parquet(?)", [summary])
    connection.execute("CREATE OR REPLACE TEMP TABLE done AS SELECT * FROM told WHERE NOT again")
    connection.execute(f"INSERT INTO {AGAIN} SELECT composition FROM told WHERE again")
    connection.execute("CREATE OR REPLACE TEMP TABLE grouped AS SELECT * FROM read_parquet(?)", [members])
    connection.execute("CREATE OR REPLACE TEMP TABLE dropped AS SELECT * FROM read_parquet(?)", [dropped])
    clear_former(connection, "done")
    connection.execute("INSERT INTO refused_pins SELECT unnest(refused), composition FROM done ORDER BY ALL")
    connection.execute("INSERT INTO matches BY NAME SELECT * FROM read_parquet(?)", [matches])
    connection.execute(
        "INSERT INTO matches SELECT m.* FROM outdated_matches m ANTI JOIN dropped d USING (record_a, record_b) "
        "WHERE m.composition IN (SELECT composition FROM done WHERE added)"
    )
    if one_number(connection, "SELECT count(*) FROM more_matches"):
        connection.execute("DELETE FROM more_matches WHERE record_id IN (SELECT record_id FROM grouped)")
    connection.execute("INSERT INTO more_matches SELECT record_id FROM grouped WHERE more ORDER BY record_id")
    rows = " UNION ALL ".join(
        f"SELECT '{grade}' AS grade, {grade}_group AS group_id, {grade}_family AS family_id, record_id, label, source, "
        f"{grade}_group = record_id AS kept, {grade}_shift AS witness_shift_angstrom, {grade}_strain AS witness_strain "
        "FROM grouped"
        for grade in GRADES
    )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE now_members AS {rows}")
    replace_members(connection, run_id, GRADES)
    connection.execute(
        "INSERT INTO grouped_compositions SELECT d.composition, d.digest, ?, d.records, d.keys, d.candidates, "
        "d.verified, d.most_candidates, d.close_pairs FROM done d ORDER BY d.composition",
        [run_id],
    )
