"""Decisions: what keep writes, holds, takes back, and what an earlier state was."""

from __future__ import annotations

import csv
import hashlib
import json
from pathlib import Path

import pytest

from lattice_census.errors import UsageError
from lattice_census.flows.deciding import pin, undo, withdraw
from lattice_census.flows.keeping import KeepJob, keep
from lattice_census.ingest.progress import call_directly
from lattice_census.output.export import export
from lattice_census.settings import resolve_settings
from lattice_census.store.connect import open_for_reading
from lattice_census.store.stages import settings_of_store

from .curated import OF_SOURCE, OPTIONS, copies, names, row, run_group, run_keep, run_night
from .tables_of_structures import query, whole_store, write_csv

IN_FORCE = "SELECT grade, record_id, kept_record_id, rule, note FROM decisions_in_force ORDER BY ALL"
MEMBERS = "SELECT grade, group_id, family_id, record_id, kept FROM members ORDER BY ALL"


def rows_of_copies(count: int = 4, each: int = 3, **facts) -> list[dict]:
    """Copy j of crystal i: label i-j, energy -1 - i/10 in theory pbe."""
    return [
        row(f"{i}-{j}", crystal, energy=-1 - i / 10, theory="pbe", date=f"2024-01-{10 + j}", **facts)
        for i, j, crystal in copies(count, each)
    ]


def exported(store: Path, folder: Path, **arguments) -> tuple[set[str], dict[str, str]]:
    """Labels kept, and labels set aside with that of their kept record."""
    connection = open_for_reading(store)
    try:
        export(connection, folder, form="csv", **arguments)
    finally:
        connection.close()
    with (folder / "kept.csv").open() as f:
        kept = {r["label"] for r in csv.DictReader(f)}
    with (folder / "set_aside.csv").open() as f:
        aside = {r["label"]: r["kept_label"] for r in csv.DictReader(f)}
    return kept, aside


@pytest.fixture
def store(tmp_path: Path) -> Path:
    write_csv(tmp_path / "t.csv", rows_of_copies())
    run_night(tmp_path / "census.duckdb", tmp_path / "t.csv")
    return tmp_path / "census.duckdb"


def test_every_record_that_repeats_another_has_one_decision(store: Path):
    aside = query(store, "SELECT record_id, group_id FROM members WHERE grade = 'near' AND NOT kept ORDER BY ALL")
    assert len(aside) == 8
    assert query(store, "SELECT record_id, kept_record_id FROM decisions_in_force ORDER BY ALL") == aside
    told = "SELECT record_id, kept_record_id, reason, witness_shift_angstrom, witness_strain FROM"
    repeats = query(store, f"{told} repeats WHERE grade = 'near' ORDER BY ALL")
    assert query(store, f"{told} decisions ORDER BY ALL") == repeats and len({row[2] for row in repeats}) > 1
    assert query(store, "SELECT DISTINCT grade, made_by IS NOT NULL, ending FROM decisions") == [("near", True, None)]
    counts = json.loads(query(store, "SELECT counts FROM runs WHERE command = 'keep'")[0][0])
    assert counts["set_aside"] == counts["in_force"] == 8


def test_a_second_run_of_keep_does_nothing(store: Path):
    before = whole_store(store)
    assert run_keep(store)["nothing_new"]
    assert whole_store(store) == before


def test_the_rule_is_the_first_that_tells_the_two_apart(tmp_path: Path):
    (crystal,) = [c for _, j, c in copies(1, 1)]
    facts = {
        "best": {"energy": -2.0, "theory": "pbe", "date": "2024-01-01"},
        "higher": {"energy": -1.999, "theory": "pbe", "date": "2024-01-01"},
        "older": {"energy": -2.0, "theory": "pbe", "date": "2023-01-01"},
        "other theory": {"energy": -9.0, "theory": "scan", "date": "2024-01-01"},
        "without": {"theory": "pbe", "date": "2024-01-01"},
    }
    write_csv(tmp_path / "t.csv", [row(label, crystal, **f) for label, f in facts.items()])
    store = tmp_path / "census.duckdb"
    run_night(store, tmp_path / "t.csv")
    rules = dict(query(store, "SELECT r.label, d.rule FROM decisions d JOIN records r USING (record_id)"))
    assert rules == {"higher": "energy", "older": "date", "other theory": "theory_name", "without": "energy"}
    run_group(store, theory_preference="scan,pbe", recompute=True)
    assert run_keep(store)["superseded"] == 3
    rules = dict(query(store, "SELECT r.label, d.rule FROM decisions_in_force d JOIN records r USING (record_id)"))
    assert rules == {"best": "theory", "higher": "theory", "older": "theory", "without": "theory"}


def test_a_dry_run_says_what_would_change_and_changes_nothing(store: Path):
    before = whole_store(store)
    assert run_keep(store, dry_run=True, grade="key")["set_aside"] == 4
    told = run_keep(store, dry_run=True, grade="key")["rows"]
    assert {r["change"] for r in told} == {"set aside"}
    assert {r["rule"] for r in told} <= {"sites", "date"}
    assert all(r["shift_angstrom"] == 0 for r in told)
    assert whole_store(store) == before


def test_a_dry_run_tells_what_other_rules_would_change(store: Path):
    before = whole_store(store)
    told = keep_with(store, dry_run=True, keep_rules=["date"])
    assert told["superseded"] + told["set_aside"] + told["kept_again"] > 0
    assert {r["rule"] for r in told["rows"] if r["change"] != "kept again"} == {"date"}
    assert whole_store(store) == before
    with pytest.raises(UsageError, match="keep_rules"):
        keep_with(store, keep_rules=["date"])
    done = keep_with(store, recompute=True, keep_rules=["date"])
    assert {k: done[k] for k in ("set_aside", "superseded", "in_force")} == {
        k: told[k] for k in ("set_aside", "superseded", "in_force")
    }
    newest = query(
        store, "SELECT r.label FROM members m JOIN records r USING (record_id) WHERE m.grade = 'near' AND kept"
    )
    assert {label.split("-")[1] for (label,) in newest} == {"2"}


def keep_with(store: Path, dry_run: bool = False, recompute: bool = False, **settings) -> dict:
    resolved = resolve_settings({**OPTIONS, **settings}, {}, stored=settings_of_store(store))
    return keep(KeepJob(store, resolved, dry_run=dry_run, recompute=recompute), call_directly)


def test_undo_takes_back_and_holds_until_again(store: Path):
    first = query(store, IN_FORCE)
    run = query(store, "SELECT run_id FROM runs WHERE command = 'keep'")[0][0]
    ids = names(store)
    one = first[0][1]
    done = undo(store, one)
    assert done["decisions"] == 1
    assert len(query(store, IN_FORCE)) == 7
    assert run_keep(store)["nothing_new"] and run_keep(store)["held"] == 1
    assert query(store, "SELECT record_id, reason FROM holds") == [(one, "undone")]
    kept, aside = exported(store, store.parent / "held")
    label = next(name for name, record in ids.items() if record == one)
    assert label in kept and len(kept) + len(aside) == 12
    assert run_keep(store, again=(one,))["set_aside"] == 1
    assert query(store, IN_FORCE) == first
    assert undo(store, str(run))["decisions"] == 7
    assert len(query(store, "SELECT * FROM decisions")) == 9
    with pytest.raises(UsageError, match="nothing to undo"):
        undo(store, str(run))
    with pytest.raises(UsageError, match="--again"):
        run_keep(store, again=(first[0][2],))


def test_undo_of_a_run_restores_the_decisions_before_it(store: Path):
    first, members = query(store, IN_FORCE), query(store, MEMBERS)
    kept, other = query(store, "SELECT kept_record_id, min(record_id) FROM decisions GROUP BY 1 ORDER BY 1")[0]
    done = pin(store, "keep", (other,), "the one we publish")
    run = run_keep(store, note="after the pin")
    assert run["superseded"] == 1 and run["set_aside"] == 1 and run["kept_again"] == 1
    assert query(store, IN_FORCE) != first
    undo(store, str(run["run"]))
    assert query(store, IN_FORCE) == first
    undo(store, str(done["run"]))
    assert (query(store, IN_FORCE), query(store, MEMBERS)) == (first, members)
    assert query(store, "SELECT ending, count(*) FROM decisions WHERE ending IS NOT NULL GROUP BY 1 ORDER BY 1") == [
        ("lapsed", 1), ("superseded", 1), ("undone", 2),
    ]  # fmt: skip


def test_undo_of_a_withdrawal_restores_members_and_decisions(store: Path):
    first, members = query(store, IN_FORCE), query(store, MEMBERS)
    done = withdraw(store, first[0][2], "wrong")
    assert len(query(store, IN_FORCE)) == 6
    again = undo(store, str(done["run"]))
    assert again["decided_again"] == 2
    assert (query(store, IN_FORCE), query(store, MEMBERS)) == (first, members)


def test_an_earlier_state_can_be_exported(store: Path, tmp_path: Path):
    at_first = exported(store, tmp_path / "first")
    run = query(store, "SELECT max(run_id) FROM runs")[0][0]
    rows = rows_of_copies()
    moved = rows_of_copies(6)[15:]
    rows[1] = {**moved[0], "material_id": rows[1]["material_id"]}  # replaced by another crystal
    rows[4] |= {"energy": -7.0}  # amended
    write_csv(tmp_path / "t.csv", rows[:11] + moved)
    run_night(store, tmp_path / "t.csv")
    withdraw(store, "t.csv:0-0", "no")
    now = exported(store, tmp_path / "now")
    assert now != at_first
    assert exported(store, tmp_path / "then", as_of=run) == at_first
    first, then = ((tmp_path / name / "structures.csv").read_text() for name in ("first", "then"))
    hashes = {label: set() for label in at_first[0]}
    for content in (first, then):
        for r in csv.DictReader(content.splitlines(keepends=True)):
            hashes[r["census_label"]].add((r["census_crystal_key"], r["census_energy_ev_per_site"]))
    assert all(len(found) == 1 for found in hashes.values())
    with pytest.raises(UsageError, match="no run of that number"):
        exported(store, tmp_path / "x", as_of=99)
    before_any = exported(store, tmp_path / "before", as_of=2)
    assert before_any == ({r["material_id"] for r in rows_of_copies()}, {})


def test_a_group_whose_energies_disagree_is_held(tmp_path: Path):
    rows = rows_of_copies(2, 3)
    rows[1]["energy"] = rows[1]["energy"] + 0.0051
    rows[4]["energy"] = rows[4]["energy"] + 0.0049
    path = write_csv(tmp_path / "t.csv", rows)
    store = tmp_path / "census.duckdb"
    counts = run_night(store, path)
    assert (counts["keep"]["set_aside"], counts["keep"]["held"]) == (2, 2)
    (found,) = query(store, "SELECT value, record_id FROM findings WHERE code = 'energy_conflict'")
    assert found[0] == pytest.approx(0.0051)
    kept, aside = exported(store, tmp_path / "clean")
    assert len(kept) == 4 and len(aside) == 2
    with (tmp_path / "clean" / "kept.csv").open() as f:
        held = {r["label"] for r in csv.DictReader(f) if r["held"].startswith("energy_conflict")}
    assert held == {"0-0", "0-1", "0-2"}
    pin(store, "keep", ("t.csv:0-0",), "checked by hand")
    assert run_keep(store)["set_aside"] == 2
    undo(store, query(store, "SELECT max(run_id)::VARCHAR FROM runs WHERE command = 'pin'")[0][0])
    rows[1]["energy"] = rows[0]["energy"]
    write_csv(path, rows)
    counts = run_night(store, path)
    assert query(store, "SELECT count(*) FROM findings WHERE code = 'energy_conflict'") == [(0,)]
    assert counts["keep"]["held"] == 0


def test_amended_energies_change_the_kept_record(tmp_path: Path):
    rows = rows_of_copies(2, 2)
    path = write_csv(tmp_path / "t.csv", rows)
    store = tmp_path / "census.duckdb"
    run_night(store, path)
    ids = names(store)
    (before,) = query(store, "SELECT group_id FROM members WHERE grade = 'near' AND record_id = ?", ids["0-0"])[0]
    other = "0-1" if before == ids["0-0"] else "0-0"
    next(r for r in rows if r["material_id"] == other)["energy"] -= 0.004
    write_csv(path, rows)
    counts = run_night(store, path)
    (after,) = query(store, "SELECT group_id FROM members WHERE grade = 'near' AND record_id = ?", ids["0-0"])[0]
    assert after == ids[other] != before
    told = query(
        store, "SELECT record_id, group_before, group_after FROM id_changes WHERE grade = 'near' AND run_id > 3"
    )
    assert sorted(told) == sorted((ids[x], before, after) for x in ("0-0", "0-1"))
    assert counts["keep"]["kept_again"] == 1 and counts["keep"]["set_aside"] == 1
    last = "SELECT record_id, kept_record_id, rule FROM decisions_in_force WHERE record_id = ?"
    assert query(store, last, before) == [(before, after, "energy")]


def test_replaced_and_withdrawn_records_leave_no_trace(tmp_path: Path):
    rows = rows_of_copies(4, 3, split="train")
    rows[4]["split"] = "test"
    path = write_csv(tmp_path / "t.csv", rows)
    store = tmp_path / "census.duckdb"
    run_night(store, path)
    ids = names(store)
    old_key = query(store, "SELECT crystal_key FROM canonical_forms WHERE record_id = ?", ids["1-2"])[0][0]
    another = rows_of_copies(6, 1)[5]
    rows[5] |= {"cif": another["cif"]}
    write_csv(path, rows)
    run_night(store, path)
    withdraw(store, "t.csv:1-1", "not ours")
    gone = ids["1-1"]
    for table in ("members", "outdated_members", "more_matches"):
        assert query(store, f"SELECT 1 FROM {table} WHERE record_id = ?", gone) == []
    assert query(store, "SELECT 1 FROM matches WHERE ? IN (record_a, record_b)", gone) == []
    assert query(store, "SELECT 1 FROM matches WHERE ? IN (crystal_key_a, crystal_key_b)", old_key) == []
    assert query(store, "SELECT 1 FROM findings WHERE ? IN (record_id, other_record_id, group_id)", gone) == []
    assert query(store, "SELECT count(*) FROM findings WHERE code = 'leak'") == [(0,)]
    assert query(store, "SELECT count(*) FROM decisions_in_force WHERE ? IN (record_id, kept_record_id)", gone) == [
        (0,)
    ]
    alone = query(store, "SELECT kept, group_id FROM members WHERE grade = 'near' AND record_id = ?", ids["1-2"])
    assert alone == [(True, ids["1-2"])]


def test_without_decisions_the_groups_are_taken_and_it_is_said(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "t.csv", rows_of_copies())
    before = hashlib.sha256(path.read_bytes()).hexdigest()
    ingest(path)
    store = tmp_path / "census.duckdb"
    connection = open_for_reading(store)
    done = export(connection, tmp_path / "a", form="csv")
    connection.close()
    assert done.grade == "key" and "No decisions exist" in done.notes[0]
    about = json.loads((tmp_path / "a" / "census.json").read_text())
    assert about["basis"] == "groups" and about["notes"] == list(done.notes)
    assert about["records"] == about["kept"] + about["set_aside"] == 12
    assert hashlib.sha256(path.read_bytes()).hexdigest() == before


def test_records_that_wait_for_group_are_kept(store: Path, tmp_path: Path, ingest):
    rows = rows_of_copies() + [r for r in rows_of_copies(4, 4) if r["material_id"].endswith("-3")]
    write_csv(tmp_path / "t.csv", rows)
    ingest(tmp_path / "t.csv", of_source=OF_SOURCE)
    kept, aside = exported(store, tmp_path / "clean")
    assert len(kept) + len(aside) == 16 and len(aside) == 8
    with pytest.raises(UsageError, match="have no family"):
        exported(store, tmp_path / "dealt", splits="train=0.5,test=0.5")
