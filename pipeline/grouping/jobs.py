"""The jobs of the stage `group`: whole compositions, with what is known of them, written down for workers."""

from __future__ import annotations

from collections.abc import Iterator

from ..ingest.engine import share
from ..settings import Settings
from ..store.parts import raw_and_part
from ..store.rows import one_number
from ..store.workspace import Workspace
from .additions import find_concerned
from .digest import PAIR_PINS
from .work import GroupJob, PairPin

MOST_PAIRS = 30_000_000
"""A job ends at so many possible pairs of keys (the square of the keys of its compositions)."""

MOST_RECORDS = 10_000
"""A job ends at so many records, or at its share of those that are left (engine.share)."""

FEW_RECORDS = 800

READ_RECORDS = 100_000
"""So many records are read for jobs to come; they are held in memory until those are given out."""

FIRST_JOBS = 2
"""So many jobs are read first, so that workers can begin."""

Pack = list[tuple[str, str, int]]
"""Compositions of one job, with their digests and numbers of records."""

CRYSTAL = ("cell_angstrom", "species", "positions_fractional", "matrix")
"""Columns of a canonical form, for records whose crystal is asked for."""

KNOWN = ("record_a", "record_b", "grade", "largest_shift_angstrom", "strain", "proper_shift_angstrom", "proper_strain")
"""Columns of `matches` that groups are made from."""


def jobs(workspace: Workspace, settings: Settings, only: str = "changed_compositions") -> Iterator[GroupJob]:
    """Jobs of whole compositions: first those in which all pairs are compared, then those in which pairs of added
    records are, whose crystals are looked for while workers have the others. Of each the largest first, so that the
    last ones to end are short. only: a table of compositions that are given out alone."""
    connection = workspace.connection
    number = 0
    for added in (False, True):
        here = f"composition IN (SELECT composition FROM {only})"
        if added and one_number(connection, f"SELECT count(*) FROM added_compositions WHERE {here}"):
            find_concerned(connection, settings)
        rows = connection.execute(
            "SELECT c.composition, c.digest, least(c.keys, coalesce(t.records, c.keys)) AS keys, "
            "coalesce(t.records, c.records), c.records FROM changed_compositions c LEFT JOIN (SELECT composition, "
            "count(*) AS records FROM concerned_records GROUP BY composition) t USING (composition) "
            f"WHERE NOT c.plain AND c.{here} AND (c.composition IN (SELECT composition FROM added_compositions)) = ? "
            "ORDER BY keys DESC, c.composition",
            [added],
        ).fetchall()
        for packs in _packs(rows, None if added else FIRST_JOBS):
            yield from _read_jobs(workspace, settings, number, packs)
            number += len(packs)


def _packs(rows: list[tuple[str, str, int, int, int]], first: int | None) -> Iterator[list[Pack]]:
    """The compositions of each job, of as many jobs as are read at once, which are `first` ones to begin with, if any.
    rows: composition, digest, keys and records that take part, and all records."""
    left = sum(row[3] for row in rows)
    most = share(left, FEW_RECORDS, MOST_RECORDS)
    packs: list[Pack] = []
    pack: Pack = []
    pairs = held = waiting = given = 0
    for composition, digest, keys, records, whole in rows:
        pack.append((composition, digest, whole))
        pairs += keys * keys
        held += records
        if pairs >= MOST_PAIRS or held >= most:
            packs.append(pack)
            waiting += held
            left -= held
            most = share(left, FEW_RECORDS, MOST_RECORDS)
            pack, pairs, held = [], 0, 0
        if waiting >= READ_RECORDS or (not given and len(packs) == first):
            yield packs
            given, packs, waiting = given + 1, [], 0
    if pack:
        packs.append(pack)
    if packs:
        yield packs


def _read_jobs(workspace: Workspace, settings: Settings, number: int, packs: list[Pack]) -> Iterator[GroupJob]:
    """The jobs of some packs, numbered from `number`: their rows are read at once, since each query goes through all
    records."""
    connection = workspace.connection
    names, digests, _ = zip(*(row for pack in packs for row in pack), strict=True)
    numbers = [number + i for i, pack in enumerate(packs) for _ in pack]
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE packed AS SELECT unnest(?::INTEGER[]) AS job, unnest(?::VARCHAR[]) AS "
        "composition, unnest(?::VARCHAR[]) AS digest", [numbers, list(names), list(digests)],
    )  # fmt: skip
    crystal = ", ".join(f"CASE WHEN there THEN {c} END AS {c}" for c in CRYSTAL)
    frame = connection.sql(
        "SELECT job, composition, digest, records, keys, record_id, label, source, crystal_key, rank, periodicity, "
        f"added, old, more, most_candidates, close_pairs, {crystal} FROM ("
        "SELECT p.job, r.composition, p.digest, c.records, c.keys, r.record_id, r.label, r.source, r.periodicity, "
        "k.rank, f.* EXCLUDE (record_id), a.most_candidates, a.close_pairs, "
        "a.composition IS NOT NULL AS added, o.record_id IS NOT NULL AS old, m.record_id IS NOT NULL AS more, "
        "a.composition IS NULL OR n.record_id IS NOT NULL AS there "
        "FROM packed p JOIN changed_compositions c USING (composition) JOIN current_records r USING (composition) "
        "JOIN canonical_forms f USING (record_id) "
        "JOIN ranks k USING (record_id) LEFT JOIN added_compositions a ON a.composition = p.composition "
        "LEFT JOIN needed_records n ON n.record_id = r.record_id LEFT JOIN old_records o ON o.record_id = r.record_id "
        "LEFT JOIN more_matches m ON m.record_id = o.record_id "
        "WHERE a.composition IS NULL OR r.record_id IN (SELECT record_id FROM concerned_records)) "
        "ORDER BY job, composition, record_id"
    ).pl()
    known = connection.sql(
        f"SELECT p.job, {', '.join(f'm.{c}' for c in KNOWN)} FROM (FROM outdated_matches UNION ALL FROM matches) m "
        "JOIN packed p USING (composition) WHERE m.record_a IN (SELECT record_id FROM concerned_records) "
        "ORDER BY p.job, m.record_a, m.record_b"
    ).pl()
    pins = connection.execute(
        f"SELECT job, composition, pin_id, kind, record_a, record_b FROM {PAIR_PINS} JOIN packed USING (composition) "
        "ORDER BY pin_id"
    ).fetchall()
    decisive = [settings.of_stage(stage) for stage in ("canonical", "fingerprint", "verify")]
    known_of = known.partition_by("job", as_dict=True, include_key=False, maintain_order=True)
    for (job,), rows in frame.partition_by("job", as_dict=True, include_key=False, maintain_order=True).items():
        own = [pin[1:] for pin in pins if pin[0] == job]
        told = known_of.get((job,))
        matches = None if told is None else raw_and_part(workspace.place, "known", told)[0]
        raw, part = raw_and_part(workspace.place, "group", rows, decisive, own, matches and matches.name)
        records = sum(row[2] for row in packs[job - number])
        yield GroupJob(job, records, raw, matches, part, settings, tuple(PairPin(*pin) for pin in own))
