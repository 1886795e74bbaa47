"""The published file is whole at every moment, whoever holds it open, and one writer works at a time."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import duckdb
import numpy as np
import pytest

from lattice_census.errors import StoreError
from lattice_census.store import workspace as workspaces
from lattice_census.store.connect import open_for_reading
from lattice_census.store.copy_ahead import BLOCK, PIECE, CopyAhead
from lattice_census.store.lock import WriterLock
from lattice_census.store.workspace import Workspace

from .tables_of_structures import crystals, query, rows_of, write_csv

HOLDER = """
import duckdb, sys, time
connection = duckdb.connect(sys.argv[1], read_only=sys.argv[2] == "read")
print(connection.execute("SELECT count(*) FROM records").fetchone()[0], flush=True)
sys.stdin.readline()
print(connection.execute("SELECT count(*) FROM records").fetchone()[0], flush=True)
"""


@pytest.mark.parametrize("how", ["read", "write"])
def test_a_notebook_that_holds_the_file_open_disturbs_nobody(tmp_path: Path, ingest, how: str):
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(4)))
    ingest(path)
    store = tmp_path / "census.duckdb"
    with subprocess.Popen(
        [sys.executable, "-c", HOLDER, str(store), how], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as notebook:
        assert notebook.stdout is not None and notebook.stdin is not None
        assert notebook.stdout.readline() == "4\n"
        write_csv(path, rows_of(crystals(9)))
        assert ingest(path)["accepted"] == 9
        assert query(store, "SELECT count(*) FROM records") == [(9,)]
        notebook.stdin.write("\n")
        notebook.stdin.flush()
        assert notebook.stdout.readline() == "4\n"
    assert query(store, "SELECT count(*) FROM records") == [(9,)]
    write_csv(path, rows_of(crystals(12)))
    assert ingest(path)["accepted"] == 12


def test_a_stray_write_ahead_log_does_not_spoil_the_new_file(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(4)))
    ingest(path)
    (tmp_path / "census.duckdb.wal").write_bytes(b"left by somebody else")
    write_csv(path, rows_of(crystals(5)))
    ingest(path)
    assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM records") == [(5,)]


def test_only_writers_compete_for_the_lock(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(2)))
    ingest(path)
    holder = "import fcntl, sys; f = open(sys.argv[1], 'r+'); fcntl.flock(f, fcntl.LOCK_EX); f.truncate(0); "
    holder += 'f.write(\'{"pid": 4711, "command": "run"}\'); f.flush(); print(\'held\', flush=True); input()'
    lock = tmp_path / "census.duckdb.work" / "lock"
    with subprocess.Popen(
        [sys.executable, "-c", holder, str(lock)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as process:
        assert process.stdout is not None and process.stdin is not None
        assert process.stdout.readline() == "held\n"
        with pytest.raises(StoreError, match="process 4711: run"):
            ingest(path)
        assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM records") == [(2,)]
        process.stdin.write("\n")
    with WriterLock(lock, "test", 5.0):
        facts = json.loads(lock.read_text())
        assert facts["command"] == "test"


def test_a_lost_work_folder_goes_on_from_the_published_file(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(4)))
    ingest(path)
    (tmp_path / "census.duckdb.work").rename(tmp_path / "gone")
    assert ingest(path)["nothing_new"]
    write_csv(path, rows_of(crystals(6)))
    counts = ingest(path)
    assert (counts["new"], counts["unchanged"]) == (2, 4)


def test_a_lost_published_file_is_published_again(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(4)))
    ingest(path)
    (tmp_path / "census.duckdb").unlink()
    ingest(path)
    assert query(tmp_path / "census.duckdb", "SELECT count(*) FROM records") == [(4,)]


def test_another_file_in_the_place_of_the_store_is_told_apart(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(4)))
    ingest(path)
    backup = (tmp_path / "census.duckdb").read_bytes()
    for count in (5, 6, 7):
        write_csv(path, rows_of(crystals(count)))
        ingest(path)
    (tmp_path / "census.duckdb").write_bytes(backup)
    with pytest.raises(StoreError, match="move the folder away"):
        ingest(path)
    (tmp_path / "census.duckdb.work").rename(tmp_path / "away")
    assert ingest(path)["new"] == 3


def test_what_is_no_store_is_refused_by_name(tmp_path: Path, ingest):
    with pytest.raises(StoreError, match="There is no store"):
        open_for_reading(tmp_path / "none.duckdb")
    (tmp_path / "text.duckdb").write_text("not a database at all")
    with pytest.raises(StoreError, match=r"text\.duckdb"):
        open_for_reading(tmp_path / "text.duckdb")
    duckdb.connect(str(tmp_path / "other.duckdb")).close()
    with pytest.raises(StoreError, match="not a store of lattice-census"):
        open_for_reading(tmp_path / "other.duckdb")
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(2)))
    with pytest.raises(StoreError, match=r"text\.duckdb"):
        ingest(path, store=tmp_path / "text.duckdb")
    assert (tmp_path / "text.duckdb").read_text() == "not a database at all"
    ingest(path)
    connection = duckdb.connect(str(tmp_path / "census.duckdb"))
    connection.execute("INSERT INTO schema_migrations VALUES (9999, 'later', now())")
    connection.close()
    with pytest.raises(StoreError, match="newer lattice-census"):
        open_for_reading(tmp_path / "census.duckdb")


def test_a_scratch_workspace_leaves_nothing(tmp_path: Path, ingest):
    path = write_csv(tmp_path / "a.csv", rows_of(crystals(2)))
    ingest(path, dry_run=True)
    assert not (tmp_path / "census.duckdb").exists()
    assert sorted(p.name for p in (tmp_path / "census.duckdb.work").iterdir()) == ["lock"]
    with Workspace(tmp_path / "census.duckdb", "test") as workspace:
        assert workspace.connection.execute("SELECT count(*) FROM runs").fetchone() == (0,)


@pytest.mark.parametrize("change", [0, BLOCK + 7, -BLOCK - 5, -PIECE])
def test_a_copy_made_ahead_becomes_the_file_it_is_brought_up_to(tmp_path: Path, change: int):
    """Blocks that differ, a longer and a shorter file; and a copy whose source somebody wrote to meanwhile."""
    rng = np.random.default_rng(5)
    before = rng.bytes(2 * PIECE + 1000)
    work, published, target = tmp_path / "work", tmp_path / "published", tmp_path / "next"
    published.write_bytes(before)
    after = bytearray(before + rng.bytes(max(change, 0)))
    del after[len(before) + min(change, 0) : len(before)]
    for place in (0, BLOCK - 1, BLOCK, PIECE + 17, len(after) - 1):
        after[place] ^= 1
    work.write_bytes(after)
    with CopyAhead(published, target) as copy:
        assert copy.brought_up_to(work)
        assert target.read_bytes() == bytes(after)
        assert published.read_bytes() == before
    assert not target.exists()


def test_a_copy_that_cannot_be_made_is_none(tmp_path: Path):
    (tmp_path / "work").write_bytes(b"work")
    with CopyAhead(tmp_path / "not there", tmp_path / "next") as copy:
        assert not copy.brought_up_to(tmp_path / "work")


def test_a_copy_that_does_not_fit_gives_the_room_back(tmp_path: Path, monkeypatch):
    def full(file: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("lattice_census.store.copy_ahead.os.fdatasync", full)
    (tmp_path / "published").write_bytes(b"store")
    with CopyAhead(tmp_path / "published", tmp_path / "next") as copy:
        assert not copy.brought_up_to(tmp_path / "published")
        assert not (tmp_path / "next").exists()


def test_what_is_published_from_a_copy_made_ahead_is_the_work_store(tmp_path: Path, ingest, monkeypatch):
    """Also where nothing is published in the end, and in a dry run: no copy is left behind."""
    monkeypatch.setattr(workspaces, "LEAST", 0)
    used = []
    whole = CopyAhead.brought_up_to
    monkeypatch.setattr(CopyAhead, "brought_up_to", lambda self, work: used.append(whole(self, work)) or used[-1])
    store, path = tmp_path / "census.duckdb", tmp_path / "a.csv"
    for count in (3, 6, 2):
        ingest(write_csv(path, rows_of(crystals(count))))
        assert store.read_bytes() == (tmp_path / "census.duckdb.work" / "work.duckdb").read_bytes()
    ingest(write_csv(path, rows_of(crystals(7))), dry_run=True)
    assert used == [True, True]
    assert query(store, "SELECT count(*) FROM current_records") == [(2,)]
    monkeypatch.setattr("lattice_census.flows.ingest._close", lambda *_: 1 / 0)
    with pytest.raises(ZeroDivisionError):
        ingest(write_csv(path, rows_of(crystals(8))))
    assert not (tmp_path / "census.duckdb.work" / "next.duckdb").exists()
