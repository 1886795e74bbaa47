"""What sources and splits have in common: every planted leak and no other, and splits that do not leak."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from lattice_census.errors import UsageError
from lattice_census.flows.deciding import pin
from lattice_census.output.dealing import deal, parse_splits
from lattice_census.output.export import export
from lattice_census.output.overlap import overlap, overlap_matrix
from lattice_census.store.connect import open_for_reading

from . import strategies
from .curated import copies, row, run_night
from .tables_of_structures import query, write_csv


@pytest.fixture(scope="module")
def split(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, str], set[str], set[str]]:
    """A store of 20 crystals in 3 copies each, dealt at random into train and test; the labels of the records of train,
    and of test, that have a copy on the other side."""
    folder = tmp_path_factory.mktemp("split")
    listed = copies(20, 3, seed=11)
    rng = np.random.default_rng(4)
    side = {f"{i}-{j}": str(rng.choice(["train", "test"], p=[0.7, 0.3])) for i, j, _ in listed}
    write_csv(folder / "t.csv", [row(f"{i}-{j}", c, split=side[f"{i}-{j}"]) for i, j, c in listed])
    run_night(folder / "census.duckdb", folder / "t.csv")
    leaks = {label for label in side if len({side[f"{label.split('-')[0]}-{j}"] for j in range(3)}) == 2}
    train = {label for label in leaks if side[label] == "train"}
    return folder / "census.duckdb", side, train, leaks - train


def reading(store: Path):
    return open_for_reading(store)


def test_every_planted_leak_is_found_and_no_other(split):
    store, side, train, test = split
    assert len(train) > 5 and len(test) > 5
    with reading(store) as connection:
        found = overlap(connection, "split", "train", "test", "near")
        assert {r["record"].removeprefix("t.csv:") for r in found.rows} == train
        assert {r["criterion"] for r in found.rows} == {"match"}
        for r in found.rows:
            assert r["record"].split("-")[0] == r["other"].split("-")[0]
            assert side[r["other"].removeprefix("t.csv:")] == "test"
            assert r["grade"] in ("key", "same", "near") and r["shift_angstrom"] < 0.05
        assert found.counts[-1] == {"grade": "near", "of_first": len(train), "of_second": len(test)}
        by_grade = [c["of_first"] for c in found.counts]
        assert by_grade == sorted(by_grade) and by_grade[0] == 0 < by_grade[1] < by_grade[3]
        (line,) = overlap_matrix(connection, "split", "near")
    assert (line["first"], line["second"], line["of_first"], line["of_second"]) == (
        "test",
        "train",
        len(test),
        len(train),
    )
    assert line["records_of_first"] + line["records_of_second"] == 60
    leaks = query(store, "SELECT count(*) FROM findings WHERE code = 'leak'")
    assert leaks == [(len({label.split("-")[0] for label in train}),)]


def test_the_key_grade_counts_equal_keys_alone(split):
    store, side, *_ = split
    keys = dict(query(store, "SELECT label, crystal_key FROM records JOIN canonical_forms USING (record_id)"))
    of = {s: {keys[label] for label in side if side[label] == s} for s in ("train", "test")}
    expected = {label for label in side if side[label] == "train" and keys[label] in of["test"]}
    with reading(store) as connection:
        found = overlap(connection, "split", "train", "test", "key")
    assert {r["record"].removeprefix("t.csv:") for r in found.rows} == expected
    assert [c["grade"] for c in found.counts] == ["copy", "key"]


def test_a_side_without_records_is_refused(split):
    with reading(split[0]) as connection, pytest.raises(UsageError, match="the split 'val'"):
        overlap(connection, "split", "train", "val", "near")


def test_dealt_splits_do_not_leak(split, tmp_path: Path):
    store = split[0]
    with reading(store) as connection:
        done = export(connection, tmp_path / "out", form="csv", splits="train=0.8,val=0.1,test=0.1", seed=7)
    assert sum(done.splits.values()) == done.kept == 20
    assert done.splits == {"train": 16, "val": 2, "test": 2}
    about = json.loads((tmp_path / "out" / "census.json").read_text())
    assert about["splits"]["records"] == done.splits and about["splits"]["seed"] == 7
    again = tmp_path / "again.duckdb"
    of_source = {"split_column": "census_dealt_split", "id_column": "census_label"}
    files = sorted((tmp_path / "out").glob("structures.*.csv"))
    assert [f.name for f in files] == ["structures.test.csv", "structures.train.csv", "structures.val.csv"]
    run_night(again, *files, of_source=of_source)
    with reading(again) as connection:
        assert overlap_matrix(connection, "split", "near") == []
    assert query(again, "SELECT count(DISTINCT split) FROM current_records") == [(3,)]


def test_whole_families_are_dealt_also_of_records_that_are_kept(tmp_path: Path):
    """Held groups are exported as a whole: their records must not be parted."""
    listed = copies(6, 3, seed=2)
    rows = [row(f"{i}-{j}", c, energy=-1.0 - j, theory="pbe") for i, j, c in listed]
    store = tmp_path / "census.duckdb"
    run_night(store, write_csv(tmp_path / "t.csv", rows))
    with reading(store) as connection:
        done = export(connection, tmp_path / "out", form="extxyz", splits="a=0.5,b=0.5")
    assert done.kept == done.held == 18
    import csv

    with (tmp_path / "out" / "kept.csv").open() as f:
        dealt = {r["label"]: r["dealt_split"] for r in csv.DictReader(f)}
    assert all(dealt[f"{i}-{j}"] == dealt[f"{i}-0"] for i in range(6) for j in range(3))
    assert set(dealt.values()) == {"a", "b"}


def test_dealing_is_a_function_of_families_fractions_and_seed():
    rng = np.random.default_rng(1)
    families = [f"{i:03d}" for i in rng.integers(0, 300, 2000)]
    fractions = parse_splits("train=0.8, val=0.15, test=0.05")
    dealt = dict(zip(families, deal(families, fractions, 3), strict=True))
    order = rng.permutation(len(families))
    mixed = [families[i] for i in order]
    assert dict(zip(mixed, deal(mixed, fractions, 3), strict=True)) == dealt
    assert dict(zip(families, deal(families, fractions, 4), strict=True)) != dealt
    largest = max(families.count(f) for f in set(families))
    for name, fraction in fractions.items():
        assert abs(sum(dealt[f] == name for f in families) - fraction * 2000) <= largest


@pytest.mark.parametrize("text", ["train", "train=0.5", "a=0.5,a=0.5", "a=-1,b=2", "a=nan,b=1", "a/b=0.5,c=0.5", "=1"])
def test_fractions_that_cannot_be_meant_are_refused(text: str):
    with pytest.raises(UsageError, match="--splits"):
        parse_splits(text)


def test_pairs_pinned_apart_are_no_overlap(tmp_path: Path):
    (a, b) = [c for _, _, c in copies(1, 2)]
    rows = [row("a", a, split="train"), row("b", b, split="test")]
    store = tmp_path / "census.duckdb"
    run_night(store, write_csv(tmp_path / "t.csv", rows))
    with reading(store) as connection:
        assert len(overlap_matrix(connection, "split", "near")) == 1
    pin(store, "apart", ("t.csv:a", "t.csv:b"), "two magnetic orders")
    with reading(store) as connection:
        assert overlap_matrix(connection, "split", "near") == []


def test_where_the_list_of_matches_is_cut_families_count_and_it_is_said(tmp_path: Path):
    """Sixteen noisy copies of one crystal, each of its own key, with one match a record: many pairs are not listed."""
    rng = np.random.default_rng(5)
    base = copies(1, 1)[0][2]
    made = [strategies.disguise(rng, base, 1, noise=0.02, strain=0.001) for _ in range(16)]
    rows = [
        row(f"{n}", c, split="train" if n < 14 else "test", date="2030-01-01" if n == 0 else None)
        for n, c in enumerate(made)
    ]
    store = tmp_path / "census.duckdb"
    run_night(store, write_csv(tmp_path / "t.csv", rows), matches_per_record=1)
    with reading(store) as connection:
        found = overlap(connection, "split", "train", "test", "near")
    assert (len(found.rows), found.counts[-1]["of_first"], found.counts[-1]["of_second"]) == (14, 14, 2)
    by_family = [r for r in found.rows if r["criterion"] == "family"]
    assert 0 < len(by_family) < 14
    assert all(r["shift_angstrom"] is None for r in by_family)
