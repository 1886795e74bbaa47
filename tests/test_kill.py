"""An ingest killed at any moment and started again ends in the store of one that was never killed."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from .tables_of_structures import crystals, rows_of, whole_store, write_csv


def _command(*arguments: str) -> list[str]:
    return [sys.executable, "-c", "from lattice_census.flows.cli import main; main()", *arguments]


def _ingest(path: Path, store: Path) -> list[str]:
    return _command(
        "ingest",
        str(path),
        "--store",
        str(store),
        "--direct",
        "--workers",
        "2",
        "--set",
        "chunk_records=100",
        "--quiet",
    )


def _children(pid: int) -> set[int]:
    found = set()
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                fields = (entry / "stat").read_text().rsplit(")", 1)[1].split()
            except (OSError, IndexError):
                continue
            if int(fields[1]) == pid:
                found |= {int(entry.name)} | _children(int(entry.name))
    return found


def _alive(pid: int) -> bool:
    try:
        return (Path("/proc") / str(pid) / "stat").read_text().rsplit(")", 1)[1].split()[0] not in ("Z", "X")
    except OSError:
        return False


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc").exists(), reason="looks for orphans in /proc")
def test_ten_kills_at_random_moments_leave_no_trace(tmp_path: Path):
    rng = np.random.default_rng(20)
    listed = crystals(500, seed=3, sites=6)
    # Nine noisy variants of each: 5,000 structures that take the reader some seconds.
    rows = rows_of([
        (cell, positions + rng.normal(0, 1e-3, positions.shape), tokens)
        for cell, positions, tokens in listed
        for _ in range(10)
    ])  # fmt: skip
    rows[17]["cif"] = "data_broken\n_cell_length_a 3\n"
    path = write_csv(tmp_path / "t.csv", rows)

    undisturbed = tmp_path / "undisturbed.duckdb"
    begun = time.monotonic()
    subprocess.run(_ingest(path, undisturbed), check=True, stdout=subprocess.DEVNULL)
    duration = time.monotonic() - begun

    store = tmp_path / "killed.duckdb"
    orphans: set[int] = set()
    kills = 0
    while kills < 10:
        process = subprocess.Popen(_ingest(path, store), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        try:
            process.wait(timeout=float(rng.uniform(0.25, 0.65)) * duration)
            # It got through: start over with a fresh store, so that every kill hits work under way.
            assert process.returncode == 0
            store.unlink()
            subprocess.run(["rm", "-r", f"{store}.work"], check=True)
        except subprocess.TimeoutExpired:
            orphans |= _children(process.pid)
            os.kill(process.pid, signal.SIGKILL)
            process.wait()
            kills += 1
    subprocess.run(_ingest(path, store), check=True, stdout=subprocess.DEVNULL)
    assert orphans, "no kill met a worker"
    deadline = time.monotonic() + 5
    while any(_alive(pid) for pid in orphans) and time.monotonic() < deadline:
        time.sleep(0.1)
    assert not [pid for pid in orphans if _alive(pid)]

    one, other = whole_store(undisturbed), whole_store(store)
    for table in one:
        assert one[table] == other[table], table
    assert len(one["records"]) == 4999 and len(one["rejects"]) == 1
    assert not list((tmp_path / "killed.duckdb.work" / "parts").iterdir())
