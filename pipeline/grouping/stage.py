"""The stage `group`: which compositions have changed, their work in the pool, and the rows it gives.

A composition is grouped from its current records, their keys, ranks and pins, and the settings alone; the digest of
these stands in `grouped_compositions`, so that only compositions whose digest changed are worked on, and a killed run
goes on with those that are left. Compositions with one key need no comparison and are written by SQL.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial

import duckdb

from ..ingest.engine import Engine, done_in_order
from ..ingest.progress import Progress
from ..ingest.touched import STAGES, grouped_until, settings_changed
from ..settings import Settings
from ..store.parts import Part, raw_and_part
from ..store.rows import one_number
from ..store.workspace import Workspace
from .digest import PAIR_PINS, digest_compositions
from .exact import note_id_changes
from .rank import rank_records
from .work import GroupJob, PairPin, group_chunk, matches_part, members_part, summary_part

GRADES = ("same", "near")

MOST_PAIRS = 30_000_000
"""A job ends at so many possible pairs of keys (the square of the keys of its compositions)."""

MOST_RECORDS = 10_000
"""A job ends at so many records, or at a sixteenth of all where that is fewer and still FEW_RECORDS."""

FEW_RECORDS = 2_000

READ_RECORDS = 100_000
"""So many records are read for jobs to come; they are held in memory until those are given out."""

GROUPED = "SELECT count(*) FROM grouped_compositions"
WAITING = (
    "SELECT count(DISTINCT composition) FROM current_records "
    "WHERE composition NOT IN (SELECT composition FROM grouped_compositions)"
)
"""Query of the number of compositions that `group` has to work on."""

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


def group_records(
    workspace: Workspace,
    run_id: int,
    settings: Settings,
    pool: Engine,
    progress: Progress,
    everything: bool = False,
) -> GroupCounts:
    """Bring `matches` and the members of grades same and near up to date with the current records.

    everything: work on every composition again. Each job's rows are committed in one transaction with its digests.
    """
    connection, manifest = workspace.connection, workspace.manifest
    _find_changed(connection, settings, everything)
    _in_transaction(connection, partial(_begin, connection, run_id))
    _in_transaction(connection, partial(_write_single, connection, run_id))
    records = one_number(connection, "SELECT coalesce(sum(records), 0) FROM changed_compositions WHERE NOT plain")
    if records:
        progress.start("comparing and grouping", records)
        pairs = one_number(connection, "SELECT sum(keys * keys) FROM changed_compositions WHERE keys > 1")
        few = 4 if pairs < LITTLE_WORK else 1
        for job, done in done_in_order(pool, group_chunk, _jobs(workspace, settings), manifest, few):
            _in_transaction(connection, partial(_commit, connection, manifest.checked(job.part), run_id))
            job.raw.unlink()
            manifest.drop(job.part)
            progress.advance(done)
    return _counts(connection, run_id)


def find_work(connection: duckdb.DuckDBPyConnection, settings: Settings, everything: bool = False) -> str | None:
    """The hash of what `group_records` would bring about, or None where nothing is to be done.

    It is that of the records as they were last noted and of the settings, and does not depend on how much is done
    already, so that an interrupted run is known by it.
    """
    stages = json.dumps([settings.of_stage(stage) for stage in STAGES], sort_keys=True)
    target = f"group {everything} {grouped_until(connection)} {hashlib.sha256(stages.encode()).hexdigest()}"
    unfinished = one_number(
        connection, "SELECT count(*) FROM runs WHERE status = 'running' AND plan_hash = ?", [target]
    )
    if not everything and not unfinished:
        _find_changed(connection, settings, False)
        left = f"SELECT count(*) FROM outdated_members WHERE {_GONE}"
        if not one_number(connection, "SELECT count(*) FROM changed_compositions") and not one_number(connection, left):
            return None
    return target


def _counts(connection: duckdb.DuckDBPyConnection, run_id: int) -> GroupCounts:
    rows = connection.execute(
        "SELECT grade, count(DISTINCT family_id), count(DISTINCT group_id), count(*) FILTER (NOT kept) FROM members "
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


def _in_transaction(connection: duckdb.DuckDBPyConnection, work: Callable[[], None]) -> None:
    connection.execute("BEGIN")
    try:
        work()
        connection.execute("COMMIT")
    except BaseException:
        connection.execute("ROLLBACK")
        raise


def _find_changed(connection: duckdb.DuckDBPyConnection, settings: Settings, everything: bool) -> None:
    """The temporary table `changed_compositions` of those that are not grouped as they are: those without a row in
    `grouped_compositions`; where settings changed, also those with another digest; or all of them."""
    if everything or settings_changed(connection, settings):
        looked_at = "SELECT DISTINCT composition FROM current_records"
    else:
        looked_at = (
            "SELECT DISTINCT composition FROM current_records "
            "WHERE composition NOT IN (SELECT composition FROM grouped_compositions)"
        )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE looked_at AS {looked_at}")
    rank_records(connection, settings, "looked_at")
    digest_compositions(connection, settings, "looked_at", everything)


def set_outdated_aside(connection: duckdb.DuckDBPyConnection, settings: Settings) -> int:
    """Take the rows of those compositions in temp.touched that are not as they were grouped out of `members` and
    `matches`; temp.ranks holds the ranks of their records.

    So that no result speaks of records as they were; `group` makes them anew and compares the ids. To be called inside
    a transaction. Returns the number of compositions that wait for `group`, once any was grouped.
    """
    if not one_number(connection, GROUPED):
        return 0
    digest_compositions(connection, settings, "touched")
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE stale AS SELECT composition FROM touched WHERE composition IN "
        "(SELECT composition FROM changed_compositions) OR composition NOT IN (SELECT composition FROM current_records)"
    )
    # The composition of a replaced record may be another now: it is touched, and so is the one it had.
    _set_aside(connection, "stale")
    return one_number(connection, WAITING)


def _set_aside(connection: duckdb.DuckDBPyConnection, table: str) -> None:
    """Take what was grouped of the compositions in a table away; who was a member of what stays in
    `outdated_members`."""
    records = f"(SELECT record_id FROM records WHERE composition IN (SELECT composition FROM {table}))"
    where = f"WHERE grade IN {GRADES} AND record_id IN {records}"
    connection.execute(
        f"INSERT INTO outdated_members SELECT grade, group_id, family_id, record_id FROM members {where}"
    )
    connection.execute(f"DELETE FROM members {where}")
    for name in ("matches", "grouped_compositions", "refused_pins"):
        connection.execute(f"DELETE FROM {name} WHERE composition IN (SELECT composition FROM {table})")
    connection.execute(f"DELETE FROM more_matches WHERE record_id IN {records}")


def _note_changes(connection: duckdb.DuckDBPyConnection, run_id: int, records: str) -> None:
    """Note how the ids of records (a query) that were grouped before have changed, and forget what they were."""
    where = f"WHERE record_id IN ({records})"
    connection.execute(f"CREATE OR REPLACE TEMP TABLE members_before AS SELECT * FROM outdated_members {where}")
    if one_number(connection, "SELECT count(*) FROM members_before"):
        connection.execute(f"DELETE FROM outdated_members {where}")
        note_id_changes(connection, run_id)


_GONE = "record_id NOT IN (SELECT record_id FROM current_records)"


def _begin(connection: duckdb.DuckDBPyConnection, run_id: int) -> None:
    """Forget records that take no part in results any more, and set aside what was grouped of those that changed."""
    _note_changes(connection, run_id, f"SELECT record_id FROM outdated_members WHERE {_GONE}")
    if one_number(
        connection, "SELECT count(*) FROM grouped_compositions JOIN changed_compositions USING (composition)"
    ):
        _set_aside(connection, "changed_compositions")


def _write_single(connection: duckdb.DuckDBPyConnection, run_id: int) -> None:
    """Members of compositions with one key: one family and one group, kept by rank."""
    single = "(SELECT composition FROM changed_compositions WHERE plain)"
    for grade in GRADES:
        connection.execute(
            "INSERT INTO members SELECT $1, first_value(r.record_id) OVER kept, min(r.record_id) OVER family, "
            "r.record_id, r.label, r.source, row_number() OVER kept = 1, 0.0, 0.0 "
            f"FROM current_records r JOIN ranks k USING (record_id) WHERE r.composition IN {single} "
            "WINDOW kept AS (PARTITION BY r.composition ORDER BY k.rank), family AS (PARTITION BY r.composition) "
            "ORDER BY r.record_id",
            [grade],
        )
    _note_changes(connection, run_id, f"SELECT record_id FROM current_records WHERE composition IN {single}")
    connection.execute(
        "INSERT INTO grouped_compositions SELECT composition, digest, ?, records, keys, 0, 0 FROM changed_compositions "
        "WHERE plain ORDER BY composition",
        [run_id],
    )


def _jobs(workspace: Workspace, settings: Settings) -> Iterator[GroupJob]:
    """Jobs of whole compositions, the largest first, so that the last ones to end are short."""
    rows = workspace.connection.execute(
        "SELECT composition, digest, keys, records FROM changed_compositions WHERE NOT plain "
        "ORDER BY keys DESC, composition"
    ).fetchall()
    most = min(MOST_RECORDS, max(FEW_RECORDS, sum(row[3] for row in rows) // 16))
    packs: list[list[tuple[str, str]]] = []
    pack: list[tuple[str, str]] = []
    pairs = held = waiting = 0
    number = 0
    for composition, digest, keys, records in rows:
        pack.append((composition, digest))
        pairs += keys * keys
        held += records
        if pairs >= MOST_PAIRS or held >= most:
            packs.append(pack)
            waiting += held
            pack, pairs, held = [], 0, 0
        if waiting >= READ_RECORDS:
            yield from _read_jobs(workspace, settings, number, packs)
            number += len(packs)
            packs, waiting = [], 0
    if pack:
        packs.append(pack)
    if packs:
        yield from _read_jobs(workspace, settings, number, packs)


def _read_jobs(
    workspace: Workspace, settings: Settings, number: int, packs: list[list[tuple[str, str]]]
) -> Iterator[GroupJob]:
    """The jobs of some packs, numbered from `number`: their rows are read at once, since each query goes through all
    records."""
    connection = workspace.connection
    names, digests = zip(*(both for pack in packs for both in pack), strict=True)
    numbers = [number + i for i, pack in enumerate(packs) for _ in pack]
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE packed AS SELECT unnest(?::INTEGER[]) AS job, unnest(?::VARCHAR[]) AS "
        "composition, unnest(?::VARCHAR[]) AS digest", [numbers, list(names), list(digests)],
    )  # fmt: skip
    frame = connection.sql(
        "SELECT p.job, r.composition, p.digest, r.record_id, f.crystal_key, k.rank, f.cell_angstrom, f.species, "
        "f.positions_fractional, r.periodicity, f.matrix FROM packed p JOIN current_records r USING (composition) "
        "JOIN canonical_forms f USING (record_id) JOIN ranks k USING (record_id) "
        "ORDER BY p.job, r.composition, r.record_id"
    ).pl()
    pins = connection.execute(
        f"SELECT job, composition, pin_id, kind, record_a, record_b FROM {PAIR_PINS} JOIN packed USING (composition) "
        "ORDER BY pin_id"
    ).fetchall()
    decisive = [settings.of_stage(stage) for stage in ("canonical", "fingerprint", "verify")]
    for (job,), rows in frame.partition_by("job", as_dict=True, include_key=False, maintain_order=True).items():
        own = [pin[1:] for pin in pins if pin[0] == job]
        raw, part = raw_and_part(workspace.place, "group", rows, decisive, own)
        yield GroupJob(job, raw, part, settings, tuple(PairPin(*pin) for pin in own))


def _commit(connection: duckdb.DuckDBPyConnection, part: Part, run_id: int) -> None:
    matches, members, summary = (str(name(part)) for name in (matches_part, members_part, summary_part))
    connection.execute("CREATE OR REPLACE TEMP TABLE done AS SELECT * FROM read_parquet(?)", [summary])
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE grouped AS SELECT g.*, r.label, r.source FROM read_parquet(?) g "
        "JOIN records r USING (record_id)",
        [members],
    )
    connection.execute("INSERT INTO refused_pins SELECT unnest(refused), composition FROM done ORDER BY ALL")
    connection.execute("INSERT INTO matches BY NAME SELECT * FROM read_parquet(?)", [matches])
    for grade in GRADES:
        connection.execute(
            f"INSERT INTO members SELECT ?, g.{grade}_group, g.{grade}_family, g.record_id, g.label, g.source, "
            f"g.{grade}_group = g.record_id, g.{grade}_shift, g.{grade}_strain FROM grouped g ORDER BY g.record_id",
            [grade],
        )
    connection.execute("INSERT INTO more_matches SELECT record_id FROM grouped WHERE more ORDER BY record_id")
    _note_changes(connection, run_id, "SELECT record_id FROM grouped")
    connection.execute(
        "INSERT INTO grouped_compositions SELECT composition, digest, ?, records, keys, candidates, verified FROM done "
        "ORDER BY composition",
        [run_id],
    )
