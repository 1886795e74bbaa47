"""The order in which records are kept, by the keep rules."""

from __future__ import annotations

from pathlib import Path

import duckdb
import pytest

from lattice_census.grouping.rank import rank_records
from lattice_census.settings import resolve_settings

from .tables_of_structures import crystals, query, rows_of, write_csv

OF_SOURCE = {
    "energy_column": "energy_per_atom", "energy_unit": "eV/site", "theory_column": "theory", "date_column": "date",
}  # fmt: skip


@pytest.fixture
def store(tmp_path: Path, ingest) -> Path:
    """One crystal five times: theories pbe and scan, energies, dates."""
    rows = rows_of(crystals(1) * 5)
    facts = [
        ("pbe", -3.0, "2024-01-01"), ("pbe", -3.2, "2023-01-01"), ("scan", -9.0, "2025-01-01"),
        ("scan", None, "2026-01-01"), ("", None, "2022-01-01"),
    ]  # fmt: skip
    for row, (theory, energy, date) in zip(rows, facts, strict=True):
        row |= {"theory": theory, "energy_per_atom": energy, "date": date}
    ingest(write_csv(tmp_path / "t.csv", rows), of_source=OF_SOURCE)
    return tmp_path / "census.duckdb"


def _order(store: Path, **settings) -> list[str]:
    connection = duckdb.connect(str(store), read_only=True)
    rank_records(connection, resolve_settings(settings, {}))
    rows = connection.execute("SELECT label FROM ranks JOIN records USING (record_id) ORDER BY rank").fetchall()
    connection.close()
    return [int(label[2:]) for (label,) in rows]


def test_energies_are_compared_within_one_theory(store: Path):
    order = _order(store)
    assert order[:3] == [1, 0, 2]
    assert order[3:] == [3, 4]
    assert _order(store, theory_preference=["scan", "pbe"]) == [2, 3, 1, 0, 4]


def test_the_rules_are_applied_in_their_order(store: Path):
    assert _order(store, keep_rules=["date"]) == [3, 2, 0, 1, 4]
    assert _order(store, keep_rules=["date", "energy"], theory_preference=["pbe"]) == [3, 2, 0, 1, 4]
    ids = query(store, "SELECT label FROM records ORDER BY record_id")
    assert _order(store, keep_rules=["symmetry", "sites"]) == [int(label[2:]) for (label,) in ids]


def test_the_kept_record_is_the_best(store: Path):
    kept = query(store, "SELECT label FROM members WHERE grade = 'key' AND kept")
    assert kept == [("m-00001",)]


def test_preferred_sources_come_first(tmp_path: Path, ingest):
    rows = rows_of(crystals(1))
    for name in ("a.csv", "b.csv", "c.csv"):
        write_csv(tmp_path / name, rows)
    ingest(*(tmp_path / n for n in ("a.csv", "b.csv", "c.csv")), source_preference="b.csv,c.csv")
    assert query(tmp_path / "census.duckdb", "SELECT source FROM members WHERE kept ORDER BY ALL") == [
        ("b.csv",), ("b.csv",),
    ]  # fmt: skip
