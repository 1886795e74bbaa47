"""What changed since the last time: files, records, versions, withdrawals."""

from __future__ import annotations

import csv
import hashlib
import shutil
from pathlib import Path

import pytest

from lattice_census.errors import StoreError, UsageError
from lattice_census.flows.deciding import undo, withdraw

from .tables_of_structures import crystals, query, rows_of, text_of, whole_store, write_csv

MEMBERS = "SELECT grade, group_id, family_id, record_id, kept FROM members ORDER BY ALL"


def test_record_ids_are_the_documented_hash(tmp_path: Path, ingest):
    write_csv(tmp_path / "t.csv", rows_of(crystals(3)))
    ingest(tmp_path / "t.csv")
    for record_id, label in query(tmp_path / "census.duckdb", "SELECT record_id, label FROM records"):
        assert record_id == hashlib.sha256(b"\0".join((b"t.csv", b"t.csv", label.encode()))).hexdigest()[:20]


def test_a_second_run_does_nothing(tmp_path: Path, ingest):
    write_csv(tmp_path / "t.csv", rows_of(crystals(10)))
    ingest(tmp_path / "t.csv")
    before = whole_store(tmp_path / "census.duckdb")
    mark = (tmp_path / "census.duckdb").stat().st_mtime_ns
    assert ingest(tmp_path / "t.csv") == {"nothing_new": True, "files": 1}
    assert whole_store(tmp_path / "census.duckdb") == before
    assert (tmp_path / "census.duckdb").stat().st_mtime_ns == mark


def test_one_amended_one_replaced_one_new_one_missing(tmp_path: Path, ingest):
    listed = crystals(101)
    rows = rows_of(listed[:100])
    path = write_csv(tmp_path / "t.csv", rows)
    ingest(path)
    rows[10]["energy_per_atom"] = -9.0
    cell, positions, tokens = listed[20]
    moved = positions.copy()
    moved[0, 0] += 0.01
    rows[20]["cif"] = text_of((cell, moved, tokens))
    rows[30]["material_id"] = "another"
    write_csv(path, rows)

    dry = ingest(path, dry_run=True)
    assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM records") == [(100,)]
    counts = ingest(path)
    assert counts == {**dry, "run": counts["run"]}
    told = {k: counts[k] for k in ("new", "amended", "replaced", "unchanged", "missing", "accepted", "rejected")}
    assert told == {
        "new": 1, "amended": 1, "replaced": 1, "unchanged": 97, "missing": 1, "accepted": 100, "rejected": 0,
    }  # fmt: skip

    fresh = tmp_path / "fresh.duckdb"
    ingest(path, store=fresh)
    assert query(fresh, MEMBERS) == query(tmp_path / "census.duckdb", MEMBERS)
    versions = query(
        tmp_path / "census.duckdb", "SELECT record_id, version, change FROM record_versions ORDER BY change"
    )
    ids = dict(query(tmp_path / "census.duckdb", "SELECT label, record_id FROM records"))
    assert versions == [(ids["m-00010"], 1, "amended"), (ids["m-00020"], 1, "replaced")]
    missing = query(tmp_path / "census.duckdb", "SELECT label FROM records WHERE missing_since_run IS NOT NULL")
    assert missing == [("m-00030",)]

    rows[30]["material_id"] = "m-00030"
    write_csv(path, rows)
    back = ingest(path)
    assert (back["missing"], back["new"], back["unchanged"]) == (1, 0, 100)
    assert query(tmp_path / "census.duckdb", "SELECT label FROM records WHERE missing_since_run IS NOT NULL") == [
        ("another",)
    ]


def test_rows_that_moved_in_their_file_are_unchanged(tmp_path: Path, ingest):
    rows = rows_of(crystals(20))
    path = write_csv(tmp_path / "t.csv", rows)
    ingest(path)
    write_csv(path, rows[::-1])
    counts = ingest(path)
    assert (counts["unchanged"], counts["amended"], counts["missing"]) == (20, 0, 0)
    assert query(tmp_path / "census.duckdb", "SELECT label FROM records ORDER BY position LIMIT 1") == [("m-00019",)]


def test_a_moved_folder_adds_nothing_and_needs_its_name(tmp_path: Path, ingest):
    (tmp_path / "old").mkdir()
    write_csv(tmp_path / "old" / "t.csv", rows_of(crystals(5)))
    ingest(tmp_path / "old")
    (tmp_path / "elsewhere").mkdir()
    shutil.move(tmp_path / "old", tmp_path / "elsewhere" / "old")
    with pytest.raises(UsageError, match="--source old"):
        ingest(tmp_path / "elsewhere" / "old")
    counts = ingest(tmp_path / "elsewhere" / "old", source="old")
    assert counts.get("nothing_new") or counts["new"] == 0
    assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM records") == [(5,)]


def test_a_file_that_left_its_folder_is_missing_and_comes_back(tmp_path: Path, ingest):
    folder = tmp_path / "c"
    folder.mkdir()
    for i, crystal in enumerate(crystals(4)):
        (folder / f"s{i}.cif").write_text(text_of(crystal))
    ingest(folder)
    (folder / "s2.cif").rename(tmp_path / "s2.cif")
    assert ingest(folder)["missing"] == 1
    current = "SELECT label FROM current_records ORDER BY label"
    assert query(tmp_path / "census.duckdb", current) == [("s0",), ("s1",), ("s3",)]
    assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM members") == [(6,)]
    (tmp_path / "s2.cif").rename(folder / "s2.cif")
    assert ingest(folder)["unchanged"] == 1
    assert len(query(tmp_path / "census.duckdb", current)) == 4


def test_withdraw_and_undo_restore_the_members_exactly(tmp_path: Path, ingest):
    store = tmp_path / "census.duckdb"
    listed = crystals(6)
    write_csv(tmp_path / "a.csv", rows_of(listed))
    write_csv(tmp_path / "b.csv", rows_of(listed[:3]))
    ingest(tmp_path / "a.csv", tmp_path / "b.csv")
    before = query(store, MEMBERS)
    assert len(before) == 18
    done = withdraw(store, "a.csv", "wrong pseudopotential")
    assert done["withdrawn"] == 6
    assert len(query(store, MEMBERS)) == 6
    assert query(store, "SELECT DISTINCT reason FROM withdrawn_records") == [("wrong pseudopotential",)]
    with pytest.raises(UsageError, match="already"):
        withdraw(store, "a.csv", "again")
    withdraw(store, "b.csv:m-00001", "broken relaxation")
    undo(store, str(done["run"]))
    assert len(query(store, MEMBERS)) == 16
    undo(store, "b.csv:m-00001")
    assert query(store, MEMBERS) == before
    assert len(query(store, "SELECT * FROM withdrawals")) == 2
    with pytest.raises(UsageError, match="nothing to undo"):
        undo(store, "b.csv:m-00001")
    with pytest.raises(StoreError, match="no store"):
        withdraw(tmp_path / "none.duckdb", "x", "y")


def test_a_withdrawn_record_stays_withdrawn_when_it_is_read_again(tmp_path: Path, ingest):
    store = tmp_path / "census.duckdb"
    rows = rows_of(crystals(4))
    path = write_csv(tmp_path / "a.csv", rows)
    ingest(path)
    withdraw(store, "a.csv:m-00002", "no")
    rows[2]["energy_per_atom"] = 0
    write_csv(path, rows)
    assert ingest(path)["amended"] == 1
    assert query(store, "SELECT count(*) FROM members WHERE grade = 'key'") == [(3,)]


def test_a_changed_setting_is_never_mixed_with_old_rows(tmp_path: Path, ingest):
    store = tmp_path / "census.duckdb"
    path = write_csv(tmp_path / "t.csv", rows_of(crystals(6)))
    ingest(path)
    with pytest.raises(UsageError, match="exact_tolerance: 0.001 -> 0.002"):
        ingest(path, exact_tolerance=0.002)
    with pytest.raises(UsageError, match="energy_column"):
        ingest(path, of_source={"energy_column": "energy_per_atom", "energy_unit": "eV/site"})
    counts = ingest(path, recompute=True, of_source={"energy_column": "energy_per_atom", "energy_unit": "eV/site"})
    assert counts["amended"] == 6
    assert query(store, "SELECT energy_ev_per_site FROM records WHERE label = 'm-00002'") == [(-1.502,)]
    keys = query(store, "SELECT record_id, crystal_key FROM crystals ORDER BY ALL")
    path.unlink()  # a canonical setting needs no input file, but the path that is named does
    with pytest.raises(UsageError, match="no file or folder"):
        ingest(path, recompute=True, exact_tolerance=0.002)
    other = write_csv(tmp_path / "other.csv", rows_of(crystals(2, seed=9)))
    ingest(other, recompute=True, exact_tolerance=0.002)
    assert query(store, "SELECT value FROM stage_settings WHERE name = 'exact_tolerance'") == [("0.002",)]
    assert set(keys) <= set(query(store, "SELECT record_id, crystal_key FROM crystals"))
    types = "SELECT record_id, lattice_type FROM crystals ORDER BY ALL"
    before = query(store, types)
    ingest(other, recompute=True, exact_tolerance=0.002, lattice_strain_tolerance=0.05)
    after = query(store, types)
    assert [r for r, _ in after] == [r for r, _ in before] and after != before
    assert query(store, "SELECT count(*) FROM crystals WHERE lattice_type IS NULL") == [(0,)]


def test_another_fingerprint_types_every_key_anew(tmp_path: Path, ingest):
    """Also of a source that is not read again, and of other compositions than its own."""
    store = tmp_path / "census.duckdb"
    path = write_csv(tmp_path / "t.csv", rows_of(crystals(4)))
    ingest(path)
    path.unlink()
    ingest(write_csv(tmp_path / "o.csv", rows_of(crystals(2, sites=3))), recompute=True, fingerprint_k=32)
    assert query(store, "SELECT count(DISTINCT composition) FROM records") == [(2,)]
    lengths = "SELECT count(*), min(len(mean_distances_angstrom)), max(len(mean_distances_angstrom)) FROM crystal_types"
    assert query(store, lengths) == [(6, 64, 64)]


def test_a_table_read_in_several_chunks_is_the_same_store(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "t.csv", rows_of(crystals(23)))
    ingest(path, store=tmp_path / "one.duckdb")
    ingest(path, store=tmp_path / "many.duckdb", chunk_records=5)
    one, many = whole_store(tmp_path / "one.duckdb"), whole_store(tmp_path / "many.duckdb")
    for table in one:
        if table not in ("chunks", "runs"):
            assert one[table] == many[table], table


def test_equal_labels_are_numbered(tmp_path: Path, ingest):
    rows = rows_of(crystals(5))
    for i, label in enumerate(["x", "x#2", "x", "x", "y"]):
        rows[i]["material_id"] = label
    path = write_csv(tmp_path / "t.csv", rows)
    ingest(path)
    labels = query(tmp_path / "census.duckdb", "SELECT label FROM records ORDER BY position")
    assert labels == [("x",), ("x#2",), ("x#3",), ("x#4",), ("y",)]


def test_the_input_is_only_read(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "t.csv", rows_of(crystals(5)))
    path.chmod(0o444)
    before = (path.read_bytes(), path.stat().st_mtime_ns)
    ingest(path)
    assert (path.read_bytes(), path.stat().st_mtime_ns) == before


def test_quoted_text_in_a_label_is_data(tmp_path: Path, ingest):
    rows = rows_of(crystals(2))
    rows[0]["material_id"] = "'; DROP TABLE records; --"
    with (tmp_path / "t.csv").open("w", newline="") as f:
        writer = csv.DictWriter(f, list(rows[0]))
        writer.writeheader()
        writer.writerows(rows)
    ingest(tmp_path / "t.csv")
    assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM records") == [(2,)]
    assert withdraw(tmp_path / "census.duckdb", "t.csv:'; DROP TABLE records; --", "odd")["withdrawn"] == 1
