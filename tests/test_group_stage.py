"""The stage `group` on a store: what it computes, what it leaves alone, and that nothing depends on how it came."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice_census.flows.deciding import undo, withdraw
from lattice_census.flows.group import GroupJob, group
from lattice_census.grouping import jobs, stage
from lattice_census.ingest.progress import Silent, call_directly
from lattice_census.settings import resolve_settings

from . import strategies
from .tables_of_structures import query, rows_of, write_csv

MEMBERS = "SELECT grade, group_id, family_id, record_id, kept FROM members ORDER BY ALL"
MATCHES = "SELECT * EXCLUDE (pairing, p_matrix, q_matrix) FROM matches ORDER BY record_a, record_b"


def collection(seed: int = 4) -> list[dict[str, Any]]:
    """Rows of 60 records: 12 crystals in four compositions, each with disguises, noise and a chain."""
    rng = np.random.default_rng(seed)
    listed = []
    for i in range(12):
        elements = [("Si", "O"), ("Ga", "N"), ("C",), ("Mg", "O", "F")][i % 4]
        base = strategies.random_crystal(rng, strategies.LATTICE_TYPES[i], 4, elements)
        listed += [base, strategies.disguise(rng, base, 2)]
        listed += [strategies.disguise(rng, base, 3, noise=0.01 * (k + 1), strain=0.001) for k in range(3)]
    return rows_of(listed)


def run_group(store: Path, everything: bool = False, **settings: Any) -> dict[str, Any]:
    """`group` without an orchestrator."""
    options = {"workers": 1, "orchestrator": "direct", **settings}
    job = GroupJob(store, resolve_settings(options, {}), everything)
    return group(job, call_directly, Silent())


@pytest.fixture(scope="module")
def rows() -> list[dict[str, Any]]:
    return collection()


def test_grouping_twice_does_nothing(tmp_path: Path, ingest, rows):
    store = tmp_path / "census.duckdb"
    ingest(write_csv(tmp_path / "t.csv", rows))
    counts = run_group(store)
    assert counts["compositions"] == 4 and counts["families"]["near"] == 12
    assert query(store, "SELECT count(*) FROM id_changes") == [(0,)]
    before = query(store, MEMBERS)
    assert run_group(store) == {"nothing_new": True}
    again = run_group(store, everything=True)
    assert again["compositions"] == 4 and query(store, MEMBERS) == before
    assert query(store, "SELECT count(*) FROM id_changes") == [(0,)]


def test_order_chunks_and_number_of_runs_change_nothing(tmp_path: Path, ingest, rows):
    table = tmp_path / "t.csv"
    one = tmp_path / "one.duckdb"
    ingest(write_csv(table, rows), store=one)
    run_group(one)
    expected = query(one, MEMBERS), query(one, MATCHES)

    other = tmp_path / "other.duckdb"
    shuffled = [rows[i] for i in np.random.default_rng(1).permutation(len(rows))]
    ingest(write_csv(table, shuffled), store=other, chunk_records=7)
    run_group(other)
    assert (query(other, MEMBERS), query(other, MATCHES)) == expected

    grown = tmp_path / "grown.duckdb"
    for end in (13, 26, 39, 52, 60):
        ingest(write_csv(table, shuffled[:end]), store=grown)
        run_group(grown)
    assert (query(grown, MEMBERS), query(grown, MATCHES)) == expected
    assert query(grown, "SELECT count(*) FROM id_changes WHERE grade = 'near'")[0][0] > 0


def test_a_record_of_another_composition_leaves_its_old_one_as_if_it_had_never_been_there(tmp_path: Path, ingest, rows):
    """Both compositions are grouped anew: the one it has, and the one it had."""
    table, store, fresh = tmp_path / "t.csv", tmp_path / "census.duckdb", tmp_path / "fresh.duckdb"
    ingest(write_csv(table, rows), store=store)
    run_group(store)
    changed = [{**row, "cif": rows[5]["cif"]} if i in (0, 3) else row for i, row in enumerate(rows)]
    ingest(write_csv(table, changed), store=store)
    assert run_group(store)["compositions"] == 2
    ingest(write_csv(table, changed), store=fresh)
    run_group(fresh)
    for asked in (MEMBERS, MATCHES, "SELECT crystal_key, typed_record_id FROM crystal_types ORDER BY ALL"):
        assert query(store, asked) == query(fresh, asked)


@pytest.mark.slow
def test_two_workers_change_nothing(tmp_path: Path, ingest, rows, monkeypatch):
    monkeypatch.setattr(jobs, "MOST_RECORDS", 1)
    monkeypatch.setattr(stage, "LITTLE_WORK", 0)
    stores = [tmp_path / "one.duckdb", tmp_path / "two.duckdb"]
    for workers, store in enumerate(stores, start=1):
        ingest(write_csv(tmp_path / "t.csv", rows), store=store)
        run_group(store, workers=workers)
    assert query(stores[0], MEMBERS) == query(stores[1], MEMBERS)
    assert query(stores[0], MATCHES) == query(stores[1], MATCHES)


def test_only_compositions_with_changes_are_worked_on(tmp_path: Path, ingest, rows):
    store = tmp_path / "census.duckdb"
    table = write_csv(tmp_path / "t.csv", rows[:-1])
    ingest(table)
    run_group(store)
    ingest(write_csv(table, rows))
    counts = run_group(store)
    assert counts["compositions"] == 1
    last = query(store, "SELECT composition FROM records WHERE label = ?", rows[-1]["material_id"])
    assert query(store, "SELECT composition FROM grouped_compositions WHERE run_id = ?", counts["run"]) == last


def test_changed_and_withdrawn_records_leave_no_trace(tmp_path: Path, ingest, rows):
    store = tmp_path / "census.duckdb"
    table = write_csv(tmp_path / "t.csv", rows)
    ingest(table)
    run_group(store)
    before = query(store, MEMBERS)
    record = query(store, "SELECT record_id FROM records WHERE label = 'm-00001'")[0][0]

    withdraw(store, record, "a test")
    for source, columns in {
        "members": ("record_id", "group_id", "family_id"),
        "matches": ("record_a", "record_b"),
        "findings": ("record_id", "other_record_id", "group_id"),
    }.items():
        for column in columns:
            assert query(store, f"SELECT count(*) FROM {source} WHERE {column} = ?", record) == [(0,)]
    assert query(store, "SELECT count(*) FROM members WHERE grade = 'near'") == [(59,)]
    undo(store, record)
    assert query(store, MEMBERS) == before

    changed = [dict(row) for row in rows]
    changed[1]["cif"] = rows[-1]["cif"]
    ingest(write_csv(table, changed))
    waiting = query(store, "SELECT count(*) FROM members WHERE grade = 'near' AND record_id = ?", record)
    assert waiting == [(0,)]
    run_group(store)
    mine = "SELECT group_id FROM members WHERE grade = 'near' AND record_id = ?"
    twin = query(store, "SELECT record_id FROM records WHERE label = ?", rows[-1]["material_id"])[0][0]
    assert query(store, mine, record) == query(store, mine, twin)
    assert query(store, "SELECT count(*) FROM id_changes WHERE record_id = ? AND grade = 'near'", record)[0][0] >= 1


def test_a_grouping_that_dies_halfway_goes_on(tmp_path: Path, ingest, rows, monkeypatch):
    monkeypatch.setattr(jobs, "MOST_RECORDS", 1)
    store, other = tmp_path / "census.duckdb", tmp_path / "other.duckdb"
    table = write_csv(tmp_path / "t.csv", rows)
    ingest(table)
    ingest(table, store=other)
    run_group(other)
    commit, done = stage._commit, []

    def dying(*arguments: Any) -> None:
        if len(done) == 2:
            raise KeyboardInterrupt
        done.append(1)
        commit(*arguments)

    monkeypatch.setattr(stage, "_commit", dying)
    with pytest.raises(KeyboardInterrupt):
        run_group(store)
    assert query(store, "SELECT count(*) FROM members WHERE grade = 'near'") == [(0,)]  # nothing was published
    monkeypatch.setattr(stage, "_commit", commit)
    counts = run_group(store)
    assert counts["run"] == 2 and query(store, "SELECT status FROM runs") == [("done",), ("done",)]
    assert query(store, MEMBERS) == query(other, MEMBERS) and query(store, MATCHES) == query(other, MATCHES)


def test_mirror_images_are_one_or_two_as_the_setting_says(tmp_path: Path, ingest):
    quartz = next(c for c, t in zip(strategies.type_crystals(), _labels(), strict=True) if t == "SiO2 (alpha-quartz)")
    listed = rows_of([quartz, strategies.mirror(quartz)])
    table = write_csv(tmp_path / "t.csv", listed)
    for setting, families in (("merge", 1), ("separate", 2)):
        store = tmp_path / f"{setting}.duckdb"
        ingest(table, store=store)
        assert run_group(store, mirror_images=setting)["families"]["near"] == families
    assert query(tmp_path / "merge.duckdb", "SELECT mirrored, reason FROM matches") == [(True, "mirror")]


def _labels() -> list[str]:
    from lattice_census.demo.structure_types import structure_types

    return [t.prototype for t in structure_types()]


def test_a_changed_limit_is_not_mixed_with_old_rows(tmp_path: Path, ingest, rows):
    from lattice_census.errors import UsageError

    store = tmp_path / "census.duckdb"
    ingest(write_csv(tmp_path / "t.csv", rows))
    run_group(store)
    with pytest.raises(UsageError, match=r"near_shift: 0\.05 -> 0\.02"):
        run_group(store, near_shift=0.02)
    options = {"workers": 1, "orchestrator": "direct", "near_shift": 0.02}
    job = GroupJob(store, resolve_settings(options, {}), recompute=True)
    assert group(job, call_directly, Silent())["compositions"] == 4
    assert query(store, "SELECT value FROM stage_settings WHERE name = 'near_shift'") == [("0.02",)]


def test_the_number_of_neighbours_changes_the_work_and_not_the_groups(tmp_path: Path, ingest, rows):
    table = write_csv(tmp_path / "t.csv", rows)
    found = []
    for k in (8, 64):
        store = tmp_path / f"{k}.duckdb"
        ingest(table, store=store, fingerprint_k=k)
        run_group(store, fingerprint_k=k)
        found.append((query(store, MEMBERS), query(store, MATCHES)))
        ((length, species),) = query(
            store, "SELECT len(mean_distances_angstrom), len(list_distinct(species)) FROM crystals LIMIT 1"
        )
        assert length == k * species
    assert found[0] == found[1]
