"""The demo after a night: its planted leaks, conflicts and totals, and a clean collection that adds up."""

from __future__ import annotations

import csv
import hashlib
import json
from pathlib import Path

import pytest

from lattice_census.demo.collection import make_collection
from lattice_census.demo.manifest import Manifest
from lattice_census.flows.demo import run_demo
from lattice_census.output.overlap import overlap
from lattice_census.store.connect import open_for_reading

from .tables_of_structures import query


@pytest.fixture(scope="module")
def shown(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Manifest]:
    """The demo as the command leaves it, and its known answer."""
    folder = tmp_path_factory.mktemp("curated") / "demo"
    assert run_demo(folder, direct=True, workers=1, quiet=True) == 0
    return folder, make_collection(tmp_path_factory.mktemp("answer"))


def name(source: str, label: str) -> str:
    return f"{source}:{label}"


def families(store: Path) -> dict[str, str]:
    rows = query(store, "SELECT source, label, family_id FROM members WHERE grade = 'near'")
    return {name(source, label): family for source, label, family in rows}


def test_the_planted_leaks_are_found_and_no_other(shown: tuple[Path, Manifest]):
    store, manifest = shown[0] / "census.duckdb", shown[1]
    family = families(store)
    found = {group for (group,) in query(store, "SELECT group_id FROM findings WHERE code = 'leak'")}
    assert found == {family[leak] for leak in manifest.leaks}
    splits = sorted({r.split for r in manifest.accepted() if r.split is not None})
    leaking = set()
    connection = open_for_reading(store)
    for i, one in enumerate(splits):
        for two in splits[i + 1 :]:
            for row in overlap(connection, "split", one, two, "near").rows:
                leaking |= {family[row["record"]], family[row["other"]]}
    connection.close()
    assert leaking == found


def test_the_planted_energies_are_found_and_no_other(shown: tuple[Path, Manifest]):
    store, manifest = shown[0] / "census.duckdb", shown[1]
    scale = query(store, "SELECT r.source, r.label FROM findings f JOIN records r USING (record_id) "
                         "WHERE f.code = 'energy_scale'")  # fmt: skip
    assert {name(*row) for row in scale} == set(manifest.totals)
    groups = dict(query(store, "SELECT source || ':' || label, group_id FROM members WHERE grade = 'near'"))
    odd = {groups[label] for label in manifest.totals + manifest.conflicts}
    assert {g for (g,) in query(store, "SELECT group_id FROM findings WHERE code = 'energy_conflict'")} == odd
    held = query(store, "SELECT DISTINCT group_id FROM holds WHERE grade = 'near'")
    assert {g for (g,) in held} == odd
    decided = query(store, "SELECT m.group_id FROM decisions_in_force d JOIN members m USING (record_id, grade)")
    assert not odd & {g for (g,) in decided}


def test_every_record_set_aside_has_a_witness_to_its_kept_one(shown: tuple[Path, Manifest]):
    """Equal keys, or a row of `matches` within the limits of near; the kept record is kept."""
    store = shown[0] / "census.duckdb"
    rows = query(
        store,
        "SELECT d.record_id, x.crystal_key = y.crystal_key, m.largest_shift_angstrom, m.strain, "
        "d.witness_shift_angstrom, d.reason FROM decisions_in_force d "
        "JOIN canonical_forms x ON x.record_id = d.record_id JOIN canonical_forms y ON y.record_id = d.kept_record_id "
        "LEFT JOIN matches m ON least(m.crystal_key_a, m.crystal_key_b) = least(x.crystal_key, y.crystal_key) "
        "AND greatest(m.crystal_key_a, m.crystal_key_b) = greatest(x.crystal_key, y.crystal_key)",
    )
    assert len(rows) == len({row[0] for row in rows}) > 300
    for _, equal, shift, strain, told, reason in rows:
        assert reason in ("copy", "rerun", "other_cell", "supercell", "mirror")
        assert (told == 0) if equal else (told == shift <= 0.05 + 1e-9 and strain <= 0.01 + 1e-9)
    assert query(store, "SELECT 1 FROM decisions_in_force WHERE kept_record_id IN "
                        "(SELECT record_id FROM decisions_in_force)") == []  # fmt: skip


def test_the_clean_collection_adds_up_and_the_input_is_as_it_was(shown: tuple[Path, Manifest], tmp_path: Path):
    folder, manifest = shown
    kept = list(csv.DictReader((folder / "clean" / "kept.csv").open(encoding="utf-8")))
    aside = list(csv.DictReader((folder / "clean" / "set_aside.csv").open(encoding="utf-8")))
    accepted = {name(r.source, r.label) for r in manifest.accepted()}
    left, right = ({name(r["source"], r["label"]) for r in rows} for rows in (kept, aside))
    assert left | right == accepted and not left & right
    assert len(list((folder / "clean" / "structures").iterdir())) == len(kept)
    about = json.loads((folder / "clean" / "census.json").read_text(encoding="utf-8"))
    assert (about["basis"], about["grade"], about["records"]) == ("decisions", "near", len(accepted))
    assert about["kept"] + about["set_aside"] == about["records"]
    assert sum(int(r["group_size"]) for r in kept) == len(accepted)
    make_collection(tmp_path)
    for path in tmp_path.rglob("*"):
        if path.is_file():
            there = folder / "collection" / path.relative_to(tmp_path)
            assert hashlib.sha256(there.read_bytes()).digest() == hashlib.sha256(path.read_bytes()).digest()


def test_no_crystal_is_set_aside_for_another_one(shown: tuple[Path, Manifest]):
    """By the known answer: a record and its kept one are of one crystal, or of two that are mirror images."""
    store, manifest = shown[0] / "census.duckdb", shown[1]
    crystal = {name(r.source, r.label): str(r.crystal) for r in manifest.accepted()}
    images = manifest.mirror_images
    rows = query(
        store,
        "SELECT a.source, a.label, b.source, b.label FROM decisions_in_force d "
        "JOIN records a ON a.record_id = d.record_id JOIN records b ON b.record_id = d.kept_record_id",
    )
    for a, b in ((crystal[name(*row[:2])], crystal[name(*row[2:])]) for row in rows):
        assert images.get(a, a) == images.get(b, b)
