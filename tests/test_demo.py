"""The demo collection against its manifest, and the command that shows it."""

from __future__ import annotations

import gzip
import hashlib
import io
import json
import tarfile
import tomllib
import zipfile
from collections import Counter
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

from lattice_census.demo.collection import SETTINGS, make_collection, sources_of
from lattice_census.demo.crystals import demo_crystals
from lattice_census.demo.disguises import another_cell, determinant, product, rotation, shaken, strained
from lattice_census.demo.draws import Draws
from lattice_census.demo.manifest import DemoRecord, Manifest
from lattice_census.demo.packing import stored_gzip, stored_tar, stored_zip
from lattice_census.demo.plan import NOISE, STRAIN
from lattice_census.errors import UsageError
from lattice_census.grouping.preparation import prepare
from lattice_census.grouping.verification import verify
from lattice_census.grouping.window import near_window
from lattice_census.model.batch import batch_from_lists
from lattice_census.model.refusals import REASONS
from lattice_census.settings import resolve_settings
from lattice_census.tolerances import Tolerances

from .tables_of_structures import query

CONTENT = "0cf828beb6d27a64c7c47c474ba1cdb8ea71f298c0712290fab4700d8652efad"
"""SHA-256 over the names and the bytes of all files, the Parquet file by its rows. It changes when the demo is changed
on purpose; it must not differ between machines."""


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Manifest]:
    """A folder in which the command has run, and the manifest."""
    from lattice_census.flows.demo import run_demo

    folder = tmp_path_factory.mktemp("demo") / "shown"
    assert run_demo(folder, direct=True, workers=1, quiet=True) == 0
    again = tmp_path_factory.mktemp("again")
    return folder, make_collection(again)


@pytest.fixture(scope="module")
def keys(demo: tuple[Path, Manifest]) -> dict[tuple[str, str, str], str]:
    """Crystal key by (source, file, label)."""
    rows = query(
        demo[0] / "census.duckdb",
        "SELECT source, file, label, crystal_key FROM records JOIN canonical_forms USING (record_id)",
    )
    return {(source, file, label): key for source, file, label, key in rows}


def place(record: DemoRecord) -> tuple[str, str, str]:
    return record.source, record.file, record.label


def digests(folder: Path) -> dict[str, str]:
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_the_collection_is_the_same_twice(tmp_path: Path, demo: tuple[Path, Manifest]) -> None:
    manifest = make_collection(tmp_path)
    assert digests(tmp_path) == digests(demo[0] / "collection")
    assert manifest == demo[1]


def test_the_collection_is_the_same_on_every_machine(demo: tuple[Path, Manifest]) -> None:
    folder = demo[0] / "collection"
    h = hashlib.sha256()
    for path in sorted(folder.rglob("*"), key=lambda p: p.relative_to(folder).as_posix()):
        if path.is_file():
            rows = path.suffix == ".parquet"
            content = json.dumps(pq.read_table(path).to_pylist()).encode() if rows else path.read_bytes()
            h.update(path.relative_to(folder).as_posix().encode() + b"\0" + hashlib.sha256(content).digest())
    assert h.hexdigest() == CONTENT


def test_the_scenario_is_as_rich_as_it_is_said_to_be(demo: tuple[Path, Manifest]) -> None:
    manifest = demo[1]
    assert 550 <= len(manifest.records) <= 650
    assert 20 <= len(manifest.refused()) <= 40
    assert 120 <= len(demo_crystals()) <= 155
    reasons = Counter(r.refusal for r in manifest.refused())
    # What cannot be shown in a small collection: a text over 20 MB, and a fault of the reduction. It has no layers.
    assert set(REASONS) - set(reasons) <= {"text_too_long", "reduction_failed", "layer_unclear"}
    assert {r.grade for r in manifest.accepted()} == {None, "copy", "key", "same", "near", "rescaled"}
    assert {r.theory for r in manifest.accepted()} == {None, "level-one", "level-two"}
    assert {r.split for r in manifest.accepted()} == {None, "train", "val", "test"}
    assert len(manifest.conflicts) == len(manifest.totals) == 1
    assert len(manifest.leaks) == 8
    assert len(manifest.near_misses) == 23
    assert sum("supercell of 8" in r.done for r in manifest.accepted()) >= 3


def test_the_manifest_on_disk_is_the_manifest(demo: tuple[Path, Manifest]) -> None:
    told = json.loads((demo[0] / "manifest.json").read_text(encoding="utf-8"))
    assert "invented" in told["about"].lower()
    assert told["records"] == len(told["list"]) == len(demo[1].records)
    assert [r["label"] for r in told["list"]] == [r.label for r in demo[1].records]
    assert told["leaks"] == list(demo[1].leaks)


def test_labels_name_one_record_each(demo: tuple[Path, Manifest]) -> None:
    names = Counter((r.source, r.label) for r in demo[1].accepted())
    assert max(names.values()) == 1
    known = {f"{source}:{label}" for source, label in names}
    manifest = demo[1]
    pointed = {r.same_as for r in manifest.accepted() if r.same_as} | set(manifest.conflicts + manifest.totals)
    assert (pointed | set(manifest.leaks)) <= known


def test_every_record_is_accepted_or_refused_as_the_manifest_says(demo: tuple[Path, Manifest]) -> None:
    store, manifest = demo[0] / "census.duckdb", demo[1]
    refused = query(store, "SELECT source, file, position, label, reason FROM rejects")
    assert sorted(refused) == sorted((*place(r)[:2], r.position, r.label, r.refusal) for r in manifest.refused())
    accepted = query(store, "SELECT source, file, position, label FROM records")
    assert sorted(accepted) == sorted((*place(r)[:2], r.position, r.label) for r in manifest.accepted())


def test_the_counts_of_every_file_add_up(demo: tuple[Path, Manifest]) -> None:
    store, manifest = demo[0] / "census.duckdb", demo[1]
    rows = query(store, "SELECT source, file, found, accepted, rejected FROM files")
    assert all(found == accepted + rejected for *_, found, accepted, rejected in rows)

    def on_disk(r: DemoRecord) -> tuple[str, str]:
        archive = next((a for a in ("attic.zip", "older.tar.gz") if r.file.startswith(a + "/")), None)
        return r.source, archive or r.file

    expected = Counter(on_disk(r) for r in manifest.records)
    assert {(source, file): found for source, file, found, *_ in rows} == expected


def test_facts_of_the_records_arrive(demo: tuple[Path, Manifest]) -> None:
    store, manifest = demo[0] / "census.duckdb", demo[1]
    rows = query(
        store,
        "SELECT source, file, label, energy_ev_per_site, theory, split, strftime(record_date, '%Y-%m-%d'), sites_given "
        "FROM records",
    )
    by_place = {(s, f, n): rest for s, f, n, *rest in rows}
    totals = set(manifest.totals)
    for record in manifest.accepted():
        energy, theory, split, date, sites = by_place[place(record)]
        assert split == record.split
        assert date == record.date
        assert record.theory in (theory, None)
        if record.energy_ev_per_site is None:
            assert energy is None
        else:
            times = sites if f"{record.source}:{record.label}" in totals else 1
            assert energy == pytest.approx(record.energy_ev_per_site * times, abs=1e-7)


def test_one_key_for_every_exact_disguise(demo: tuple[Path, Manifest], keys: dict[tuple[str, str, str], str]) -> None:
    of_class: dict[str, set[str]] = {}
    for record in demo[1].accepted():
        if record.key_class is not None:
            of_class.setdefault(record.key_class, set()).add(keys[place(record)])
    several = {name: len(found) for name, found in of_class.items() if len(found) > 1}
    assert not several
    assert len(set.union(*of_class.values())) == len(of_class)


def test_no_key_joins_two_crystals(demo: tuple[Path, Manifest], keys: dict[tuple[str, str, str], str]) -> None:
    """Also not by way of noise: near misses stay apart from what they nearly are."""
    crystals: dict[str, set[str]] = {}
    for record in demo[1].accepted():
        crystals.setdefault(keys[place(record)], set()).add(str(record.crystal))
    assert {frozenset(names) for names in crystals.values() if len(names) > 1} == set()


def test_groups_of_the_store_follow_the_keys(
    demo: tuple[Path, Manifest], keys: dict[tuple[str, str, str], str]
) -> None:
    rows = query(
        demo[0] / "census.duckdb",
        "SELECT r.source, r.file, r.label, m.group_id FROM members m JOIN records r USING (record_id) "
        "WHERE m.grade = 'key'",
    )
    groups: dict[str, set[str]] = {}
    for source, file, label, group in rows:
        groups.setdefault(group, set()).add(keys[source, file, label])
    assert all(len(found) == 1 for found in groups.values())
    assert len(groups) == len(set(keys.values()))


def test_copies_are_copies(demo: tuple[Path, Manifest]) -> None:
    rows = query(demo[0] / "census.duckdb", "SELECT source, label, content_hash FROM records")
    content = {f"{source}:{label}": h for source, label, h in rows}
    copies = [r for r in demo[1].accepted() if r.grade == "copy"]
    assert len(copies) > 20
    for record in copies:
        assert record.same_as is not None
        assert content[f"{record.source}:{record.label}"] == content[record.same_as]


def test_pairs_reach_the_grade_that_the_manifest_gives(demo: tuple[Path, Manifest]) -> None:
    """Disguises are found at their grade, near misses at none: neither with what they nearly are, nor in the window."""
    rows = query(
        demo[0] / "census.duckdb",
        "SELECT r.source || ':' || r.label, r.composition, x.cell_angstrom, x.species, x.positions_fractional "
        "FROM records r JOIN canonical_forms x USING (record_id) ORDER BY r.source, r.label",
    )
    places = {name: i for i, (name, *_) in enumerate(rows)}
    firsts = {str(r.crystal): f"{r.source}:{r.label}" for r in demo[1].accepted() if r.grade is None}
    wanted: dict[str, list[tuple[int, int, str | None]]] = {}

    def want(a: str, b: str, grade: str | None) -> None:
        wanted.setdefault(rows[places[a]][1], []).append((places[a], places[b], grade))

    for record in demo[1].accepted():
        if record.same_as is not None and record.grade != "rescaled":
            want(f"{record.source}:{record.label}", record.same_as, record.grade)
    for images, grade in ((demo[1].mirror_images, "same"), (demo[1].near_misses, None)):
        for one, other in images.items():
            want(firsts[one], firsts[other], grade)
    limits = near_window(Tolerances())
    strictest = {"copy": 0, "key": 0, "same": 0, "near": 1, None: 3}
    wrong = []
    for of_one_composition in wanted.values():
        used = sorted({i for a, b, _ in of_one_composition for i in (a, b)})
        batch = batch_from_lists(
            [np.array(rows[i][2]).reshape(3, 3) for i in used],
            [np.array(rows[i][4]).reshape(-1, 3) for i in used],
            [list(rows[i][3]) for i in used],
        )
        pairs = np.array([(used.index(a), used.index(b)) for a, b, _ in of_one_composition])
        reached = verify(prepare(batch, limits), pairs, limits).grade
        for (a, b, grade), got in zip(of_one_composition, reached.tolist(), strict=True):
            if got > strictest[grade] or (grade is None and got < 3):
                wrong.append((rows[a][0], rows[b][0], grade, got))
    assert not wrong


def test_the_command_leaves_what_it_says(demo: tuple[Path, Manifest]) -> None:
    folder = demo[0]
    assert {p.name for p in folder.iterdir()} >= {"collection", "manifest.json", "demo.toml", "census.duckdb", "clean"}
    store = folder / "census.duckdb"
    (aside,) = query(store, "SELECT count(DISTINCT record_id) FROM decisions_in_force WHERE grade = 'near'")[0]
    assert aside > 300
    assert len(list((folder / "clean/structures").glob("*.cif"))) == len(demo[1].accepted()) - aside


def test_the_store_groups_the_demo_as_it_was_made(demo: tuple[Path, Manifest]) -> None:
    """Records of one crystal (no near miss, no other volume) are one near family; two crystals never are."""
    rows = query(
        demo[0] / "census.duckdb",
        "SELECT r.source, r.file, r.label, m.family_id FROM members m JOIN records r USING (record_id) "
        "WHERE m.grade = 'near'",
    )
    family = {(source, file, label): name for source, file, label, name in rows}
    named = {f"{source}:{label}": name for (source, _, label), name in family.items()}
    crystals: dict[str, set[str]] = {}
    for record in demo[1].accepted():
        crystals.setdefault(family[place(record)], set()).add(str(record.crystal))
        if record.same_as is not None and record.grade != "rescaled":
            assert family[place(record)] == named[record.same_as], record
    hands = [{*pair} for pair in demo[1].mirror_images.items()]
    mixed = [names for names in crystals.values() if len(names) > 1]
    assert all(any(names <= pair for pair in hands) or len(names) == 1 for names in mixed), mixed[:5]
    leaks = query(demo[0] / "census.duckdb", "SELECT count(*) FROM findings WHERE code = 'leak'")[0][0]
    assert leaks == len(demo[1].leaks)


def test_the_command_refuses_a_folder_that_is_not_empty(tmp_path: Path) -> None:
    from lattice_census.flows.demo import run_demo

    (tmp_path / "something").write_text("mine")
    with pytest.raises(UsageError, match="not an empty folder"):
        run_demo(tmp_path, direct=True, workers=1, quiet=True)
    assert [p.name for p in tmp_path.iterdir()] == ["something"]


def test_the_settings_of_the_demo_are_settings(tmp_path: Path) -> None:
    file = tmp_path / "demo.toml"
    file.write_text(SETTINGS, encoding="utf-8")
    settings = resolve_settings({}, {}, file=file)
    assert set(settings.sources) == set(tomllib.loads(SETTINGS)["sources"])
    assert set(settings.sources) < {p.name for p in sources_of(tmp_path)}


def test_draws_are_the_same_everywhere() -> None:
    """The first value is the Mersenne Twister's for seed 1, as Python's documentation promises for all versions."""
    draws = Draws(1)
    assert draws.random() == 0.13436424411240122


def test_noise_and_strain_stay_within_their_limits() -> None:
    draws = Draws(5)
    for crystal in demo_crystals()[::10]:
        made = another_cell(draws, crystal.primitive, 2)
        noisy = shaken(draws, made, NOISE)
        steps = np.linalg.norm((noisy[1] - made[1]) @ made[0], axis=1)
        assert 0 < steps.max() <= NOISE * (1 + 1e-9)
        stretched = strained(draws, made, STRAIN)
        deformation = np.linalg.inv(made[0]) @ stretched[0]
        assert np.abs(np.log(np.linalg.svd(deformation, compute_uv=False))).max() <= STRAIN
        turn = rotation(draws)
        assert np.allclose(turn @ turn.T, np.eye(3), atol=1e-14)
        assert determinant(turn) > 0
        assert np.allclose(product(made[1], made[0]), made[1] @ made[0], atol=1e-12)


def test_packed_files_open_with_ordinary_tools() -> None:
    data = bytes(range(256)) * 300
    assert gzip.decompress(stored_gzip(data)) == data
    assert gzip.decompress(stored_gzip(b"")) == b""
    with zipfile.ZipFile(io.BytesIO(stored_zip([("a/b.txt", data)]))) as archive:
        assert archive.read("a/b.txt") == data
    with tarfile.open(fileobj=io.BytesIO(stored_gzip(stored_tar([("a/b.txt", data)])))) as archive:
        member = archive.extractfile("a/b.txt")
        assert member is not None
        assert member.read() == data
