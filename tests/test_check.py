"""`check`: a healthy store passes in every state it can be published in, and each check notices its own damage."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import duckdb
import pytest

from lattice_census.flows.deciding import undo, withdraw
from lattice_census.output.check import check_queries, check_store
from lattice_census.store.connect import open_for_reading

from .proven_store import labelled_crystals, make_proven_store, run_group, run_ingest
from .tables_of_structures import query, text_of, write_csv
from .test_commands import census

ALONE = "SET group_id = record_id, family_id = record_id, kept = true"
PAIR = "(SELECT record_id FROM records WHERE label IN ('n1', 'n2'))"

DAMAGE: dict[str, tuple[str, ...]] = {
    "decisions-are-single": (
        "INSERT INTO decisions SELECT i, record_id, group_id, grade, 'sites', 'other_cell', 0, 0, 1, now()::TIMESTAMP, "
        "'x', NULL, NULL, NULL, NULL FROM members, range(2) t(i) WHERE grade = 'near' AND NOT kept",
    ),
    "compositions-are-grouped-as-they-are": ("UPDATE grouped_compositions SET digest = 'of other records'",),
    "kept-records-rank-first": (
        "UPDATE members SET group_id = o.record_id, kept = members.record_id = o.record_id FROM (SELECT group_id, "
        "min(record_id) AS record_id FROM members WHERE grade = 'key' AND NOT kept GROUP BY group_id) o "
        "WHERE members.grade = 'key' AND members.group_id = o.group_id",
    ),
    "record-ids-are-unique": ("INSERT INTO structures SELECT * FROM structures LIMIT 1",),
    "record-ids-are-hashes": ("UPDATE records SET label = 'elsewhere' WHERE label = 'gone'",),
    "records-are-complete": (
        "DELETE FROM crystal_types WHERE crystal_key IN (SELECT crystal_key FROM canonical_forms "
        "JOIN records USING (record_id) WHERE label = 'k1')",
    ),
    "keys-are-typed-once": (
        "INSERT INTO crystal_types SELECT * FROM crystal_types WHERE crystal_key IN "
        "(SELECT crystal_key FROM canonical_forms JOIN records USING (record_id) WHERE label = 'gone')",
    ),
    "keys-are-one-crystal": ("UPDATE records SET periodicity = 1 WHERE label = 'k2'",),
    "sites-are-counted": ("UPDATE records SET sites_given = sites_given + 1 WHERE label = 'k1'",),
    "counts-add-up": ("UPDATE files SET found = found + 1 WHERE file = 't.csv'",),
    "files-hold-what-they-say": (
        "UPDATE files SET accepted = accepted + 1, found = found + 1 WHERE file = 'more/pack.zip'",
    ),
    "records-lie-in-a-file": ("INSERT INTO rejects SELECT * REPLACE ('nowhere.cif' AS file) FROM rejects LIMIT 1",),
    "refusals-have-known-reasons": ("UPDATE rejects SET reason = 'boredom'",),
    "nothing-is-left-seen": ("INSERT INTO seen VALUES ('in', 't.csv', '0')",),
    "runs-have-ended": ("UPDATE runs SET status = 'running' WHERE run_id = 1",),
    "versions-are-numbered": ("INSERT INTO record_versions (record_id, version) VALUES ('0', 2)",),
    "withdrawals-name-something": ("INSERT INTO withdrawals (withdrawal_id, undone_by_run) VALUES (1, 2)",),
    "members-are-complete": (
        "INSERT INTO members SELECT * FROM members WHERE grade = 'near' AND NOT kept AND label IN ('n1', 'n2')",
    ),
    "members-are-current": ("UPDATE members SET label = 'another' WHERE label = 'k1' AND grade = 'copy'",),
    "results-are-of-current-records": (
        "INSERT INTO more_matches SELECT record_id FROM records WHERE label = 'gone'",
    ),
    "outdated-members-wait": (
        "INSERT INTO outdated_members SELECT grade, group_id, family_id, record_id FROM members WHERE grade = 'near' "
        "LIMIT 1",
    ),
    "one-record-a-group-is-kept": ("UPDATE members SET kept = false WHERE label = 'alone' AND grade = 'near'",),
    "families-have-the-smallest-id": (
        "UPDATE members SET family_id = repeat('f', 20) WHERE label = 'alone' AND grade = 'near'",
    ),
    "groups-lie-in-one-family": (
        "INSERT INTO members SELECT 'isotypic', (SELECT record_id FROM records WHERE label = 'alone'), record_id, "
        "record_id, label, source, label = 'alone', 0, 0 FROM members WHERE grade = 'near' "
        "AND label IN ('alone', 'w1')",
    ),
    "exact-groups-are-equal": (f"UPDATE members {ALONE} WHERE grade = 'key' AND label IN ('k1', 'k2')",),
    "grades-refine": (f"UPDATE members {ALONE} WHERE grade = 'same' AND label IN ('k1', 'k2')",),
    "grouped-compositions-are-counted": ("UPDATE grouped_compositions SET keys = keys + 1 WHERE composition = 'Cl K'",),
    "matches-stand-by-their-records": ("UPDATE matches SET composition = 'X' WHERE composition = 'F Li'",),
    "matches-have-their-grade": ("UPDATE matches SET grade = NULL WHERE composition = 'F Li'",),
    "matches-lie-in-families": (f"UPDATE members {ALONE} WHERE grade = 'near' AND label IN ('n1', 'n2')",),
    "set-aside-records-match": (
        "UPDATE members SET witness_shift_angstrom = witness_shift_angstrom + 1e-6 "
        "WHERE grade = 'near' AND NOT kept AND label IN ('n1', 'n2')",
    ),
    "kept-records-do-not-match": (
        f"UPDATE members SET group_id = record_id, kept = true WHERE grade = 'near' AND record_id IN {PAIR}",
    ),
    "families-hang-together": (
        f"UPDATE members SET group_id = record_id, kept = true WHERE grade = 'near' AND record_id IN {PAIR}",
        "DELETE FROM matches WHERE composition = 'Ga N'",
    ),
    "witnesses-of-matches": (
        "UPDATE matches SET pairing = list_reverse(pairing) WHERE composition = 'F Li'",
    ),
    "witnesses-of-keys": (
        "UPDATE canonical_forms SET origin_fractional = [0.3, 0.2, 0.1] "
        "WHERE record_id IN (SELECT record_id FROM records WHERE label = 'k2')",
    ),
}  # fmt: skip
"""By check: what breaks it, and nothing else."""


@pytest.fixture(scope="module")
def healthy(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return make_proven_store(tmp_path_factory.mktemp("proven"))


def broken(store: Path, sample: int = 1000) -> dict[str, int]:
    """The checks that fail, with the number of their rows."""
    connection = open_for_reading(store)
    try:
        return {o.name: o.failures for o in check_store(connection, sample) if o.failures}
    finally:
        connection.close()


def test_the_store_holds_a_pair_of_each_kind(healthy: Path):
    rows = query(
        healthy,
        "SELECT a.label, b.label, m.grade, m.mirrored FROM matches m JOIN records a ON a.record_id = record_a "
        "JOIN records b ON b.record_id = record_b",
    )
    found = {(*sorted((a, b)), grade, mirrored) for a, b, grade, mirrored in rows}
    assert {("n1", "n2", "near", False), ("r1", "r2", "same", False), ("w1", "w2", "window", False)} <= found
    assert any("c-mirror" in pair and mirrored for *pair, mirrored in found)
    assert query(healthy, "SELECT count(*) FROM members WHERE grade = 'key' AND NOT kept") == [(2,)]


def test_a_healthy_store_passes(healthy: Path):
    assert broken(healthy) == {}


@pytest.mark.parametrize(
    "name",
    [
        *check_queries(),
        "families-hang-together",
        "compositions-are-grouped-as-they-are",
        "kept-records-rank-first",
        "witnesses-of-matches",
        "witnesses-of-keys",
    ],
)
def test_each_check_notices_its_own_damage(tmp_path: Path, healthy: Path, name: str):
    store = shutil.copy(healthy, tmp_path / "census.duckdb")
    connection = duckdb.connect(str(store))
    for statement in DAMAGE[name]:
        connection.execute(statement)
    connection.close()
    assert set(broken(store)) == {name}


def test_every_check_begins_with_its_invariant_and_names_its_columns(healthy: Path):
    connection = open_for_reading(healthy)
    for outcome in check_store(connection, 0):
        assert outcome.invariant.endswith(".") and outcome.invariant[0].isupper(), outcome.name
        assert len(outcome.columns) >= 2 or outcome.name == "keys-are-typed-once"


def test_a_match_to_one_reduced_cell_is_audited_as_it_came(tmp_path: Path, healthy: Path):
    """Damage to the structure as it came is met, though canonical forms and matches are as they were."""
    store = shutil.copy(healthy, tmp_path / "census.duckdb")
    connection = duckdb.connect(str(store))
    connection.execute(
        "UPDATE structures SET positions_fractional = list_concat([positions_fractional[1] + 0.01], "
        "positions_fractional[2:]) WHERE record_id IN (SELECT record_id FROM records WHERE label = 'w2')"
    )
    connection.close()
    assert set(broken(store)) == {"witnesses-of-matches"}


def test_every_published_state_passes(tmp_path: Path):
    inputs = tmp_path / "in"
    inputs.mkdir()
    crystals = labelled_crystals()
    rows = [{"material_id": n, "cif": text_of(c, n), "batch": "b"} for n, c in crystals.items()]
    write_csv(inputs / "t.csv", rows)
    store = tmp_path / "census.duckdb"
    run_ingest(store, inputs)
    assert broken(store) == {}  # read, not grouped
    run_group(store)
    withdraw(store, "in:n1", "a test")
    assert broken(store) == {}  # withdrawn
    undo(store, "in:n1")
    assert broken(store) == {}
    changed = [dict(row) for row in rows if row["material_id"] != "r1"]
    changed[1]["cif"], changed[5]["batch"] = rows[8]["cif"], "c"
    write_csv(inputs / "t.csv", changed)
    run_ingest(store, inputs)
    assert query(store, "SELECT count(*) > 0 FROM outdated_members") == [(True,)]
    assert broken(store) == {}  # one replaced, one amended, one missing; some compositions wait
    run_group(store)
    assert broken(store) == {}
    run_group(store, recompute=True, mirror_images="separate")
    assert query(store, "SELECT count(*) FROM matches WHERE grade IS NULL") != [(0,)]
    assert broken(store) == {}  # mirror images kept apart


def test_pins_against_the_geometry_pass(tmp_path: Path, healthy: Path):
    shutil.copy(healthy, tmp_path / "census.duckdb")
    for kind, *pair in (("apart", "k1", "k2"), ("apart", "n1", "n2"), ("together", "w1", "w2")):
        done = census("pin", kind, *(f"in:{label}" for label in pair), "--reason", "a test", cwd=tmp_path)
        assert done.returncode == 0, done.stderr
    store = tmp_path / "census.duckdb"
    labels = "SELECT count(DISTINCT group_id) FROM members WHERE grade = 'near' AND label IN (?, ?)"
    assert [query(store, labels, f"{x}1", f"{x}2") for x in "knw"] == [[(2,)], [(2,)], [(1,)]]
    assert broken(store) == {}


def test_the_command(tmp_path: Path, healthy: Path):
    shutil.copy(healthy, tmp_path / "census.duckdb")
    done = census("check", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    lines = done.stdout.splitlines()
    assert len(lines) == len(DAMAGE) + 1 and lines[-1] == f"All {len(DAMAGE)} checks hold."
    assert all(": ok" in line for line in lines[:-1])
    matches = query(healthy, "SELECT count(*) FROM matches")[0][0]
    assert f"witnesses-of-matches: ok (all {matches} audited)" in lines
    assert f"witnesses-of-matches: ok (2 of {matches} audited)" in census("check", "--sample", "2", cwd=tmp_path).stdout
    connection = duckdb.connect(str(tmp_path / "census.duckdb"))
    connection.execute("INSERT INTO seen SELECT 'in', 't.csv', i::VARCHAR FROM range(7) t(i)")
    connection.close()
    done = census("check", cwd=tmp_path)
    assert done.returncode == 4 and "1 of" in done.stderr and "nothing-is-left-seen" in done.stderr
    assert "nothing-is-left-seen: 7 FAIL" in done.stdout and "... and 2 more" in done.stdout
    told = json.loads(census("check", "--json", cwd=tmp_path).stdout)
    assert not told["holds"] and len(told["checks"]) == len(DAMAGE)
    failed = [c for c in told["checks"] if not c["holds"]]
    assert [(c["check"], c["failures"], len(c["rows"])) for c in failed] == [("nothing-is-left-seen", 7, 5)]


def test_check_starts_without_the_heavy_parts(tmp_path: Path, healthy: Path):
    code = (
        f"import sys; sys.argv = ['lattice-census', 'check', '--store', {str(healthy)!r}]\n"
        "from lattice_census.flows.cli import main\n"
        "try: main()\nexcept SystemExit as e: assert not e.code, e.code\n"
        "print([m for m in ('prefect', 'numba', 'scipy', 'matplotlib') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.stdout.endswith("[]\n"), (done.stdout, done.stderr)
