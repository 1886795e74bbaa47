"""The benchmarks: their collections are what they say, their parts run, and a wrong answer makes them fail."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from collections import Counter
from importlib import import_module

import duckdb
import numpy as np
import pytest

from lattice_census.model.species import formulas_of
from tests.bench import __main__ as command
from tests.bench import collection, copies, end_to_end, group, start, structures, workers
from tests.bench.collection import ONE_COMPOSITION, ONE_CRYSTAL, Kind
from tests.bench.figures import Figure, Options, Report, table
from tests.bench.invented import APART, MOST_SITES
from tests.bench.invented_disguises import MOST_GIVEN
from tests.bench.known_answer import check_answer
from tests.bench.night import nights
from tests.bench.process_tree import MemoryOfTree
from tests.bench.timing import exponent
from tests.strategies import least_distance, reduced

MANY = 6000


@pytest.fixture(scope="module")
def made():
    """Records of the ordinary kind."""
    return collection.records(Kind(), 0, MANY)


@pytest.fixture(scope="module")
def scratch(tmp_path_factory):
    """A folder that the tests of nights share."""
    return tmp_path_factory.mktemp("bench")


# ---------------------------------------------------------------------------------------------------------------------
# Collections
# ---------------------------------------------------------------------------------------------------------------------


def test_a_record_is_the_same_whatever_is_made_with_it(made):
    some = collection.records(Kind(), 1234, 1300)
    for i in range(66):
        assert (some.batch.cells[i] == made.batch.cells[1234 + i]).all()
        assert (some.batch.positions[some.batch.sites(i)] == made.batch.positions[made.batch.sites(1234 + i)]).all()
        assert some.batch.tokens_of(i) == made.batch.tokens_of(1234 + i)
    assert (collection.truth(Kind(), 0, MANY) == made.crystal).all()
    other = collection.records(Kind(seed=2), 0, 50)
    assert not any(np.array_equal(other.batch.cells[i], made.batch.cells[i]) for i in range(50))


def test_share_of_copies_sizes_and_disguises(made):
    copy = made.crystal != np.arange(MANY)
    assert abs(copy.mean() - 0.35) < 0.03
    assert (made.crystal[copy] < np.flatnonzero(copy)).all(), "a copy shows a crystal of an earlier record"
    given = np.diff(made.batch.offsets)
    sites = given // made.index
    assert (sites * made.index == given).all()
    own = sites[~copy]
    assert 8 <= np.median(own) <= 10
    assert own.min() >= 1 and own.max() <= MOST_SITES and given.max() <= MOST_GIVEN
    # Log-normal: the logarithms are spread evenly about the median, two in three within one standard deviation.
    logs = np.log(own)
    assert 0.5 < logs.std() < 0.9
    assert abs(np.mean(logs) - np.log(np.median(own))) < 0.15
    assert 0.6 < np.mean(np.abs(logs - logs.mean()) < logs.std()) < 0.76
    assert set(made.index[copy].tolist()) == {1, 2, 3, 4} and (made.index[~copy] == 1).all()
    assert abs(made.mirrored[copy].mean() - 0.5) < 0.06 and not made.mirrored[~copy].any()
    assert {round(n, 3) for n in made.noise.tolist()} == {0.0, 0.01, 0.02}


def test_compositions_are_spread_as_in_a_real_collection(made):
    counts = np.sort(list(Counter(f.composition for f in formulas_of(made.batch)).values()))
    assert np.median(counts) <= 2
    assert counts[-1] > 0.01 * MANY
    assert len(counts) > 0.25 * MANY


def test_sites_keep_their_distance(made):
    for i in range(0, MANY, 97):
        cell, x = made.batch.cells[i], made.batch.positions[made.batch.sites(i)]
        short = reduced(cell)
        least = least_distance(short, x @ cell @ np.linalg.inv(short))
        assert least > 1.3 - 2 * made.noise[i], (i, least)
        if len(x) > 1 and made.crystal[i] == i and made.batch.volumes[i] / len(x) < 18:
            assert least > 1.3
    assert APART == 1.4


def test_exact_copies_have_the_key_of_their_crystal_and_no_other_crystal_has_it():
    few = collection.records(Kind(), 0, 600)
    canonical = structures.canonical_of(few.batch)
    assert len(canonical) == 600, "every record is accepted"
    keys = np.array(canonical.crystal_key)
    exact = (few.noise == 0) & ~few.mirrored  # a random crystal is chiral: its mirror image has another key
    assert exact.sum() > np.unique(few.crystal).size + 30
    crystal_of_key = {}
    for key, crystal in zip(keys.tolist(), few.crystal.tolist(), strict=True):
        assert crystal_of_key.setdefault(key, crystal) == crystal
    assert (keys[exact] == keys[few.crystal[exact]]).all()
    assert (canonical.supercell_index[exact] == few.index[exact]).all()
    moved = few.noise > 0
    assert (keys[moved] != keys[few.crystal[moved]]).all()


def test_kinds_of_one_composition_and_of_one_crystal():
    one, same = collection.records(ONE_COMPOSITION, 0, 300), collection.records(ONE_CRYSTAL, 0, 300)
    assert len({f.composition for f in formulas_of(one.batch)}) == 1 == len({*same.crystal.tolist()})
    assert abs(len(set(one.crystal.tolist())) / 300 - 0.65) < 0.08


def test_files_hold_all_records_once(tmp_path, monkeypatch):
    monkeypatch.setattr(collection, "PER_FILE", 40)
    monkeypatch.setattr(collection, "BLOCK", 15)
    folder = collection.write_collection(tmp_path / "many", Kind(), 0, 100)
    rows = duckdb.sql(f"SELECT id, crystal, cif FROM read_csv('{folder}/*.csv') ORDER BY id").fetchall()
    assert [r[0] for r in rows] == [f"r{i:09}" for i in range(100)]
    assert [r[1] for r in rows] == collection.truth(Kind(), 0, 100).tolist()
    assert len(list(folder.iterdir())) == 3


# ---------------------------------------------------------------------------------------------------------------------
# Parts
# ---------------------------------------------------------------------------------------------------------------------


def test_every_part_has_a_module():
    for name in command.PARTS:
        assert callable(import_module(f"tests.bench.{name.replace('-', '_')}").run)


@pytest.mark.parametrize("name", ["read", "reduce", "classify", "fingerprint", "verify", "group", "store"])
def test_part_on_few_records(name, scratch):
    reports, wrong = command.run_parts([name], Options(records=120, repeat=1, scratch=scratch))
    assert not wrong
    assert reports[0].part == name and all(np.isfinite(f.value) for f in reports[0].figures)
    json.dumps(reports[0].as_json())


@pytest.fixture(scope="module")
def night(scratch):
    """One night on few records, with one worker."""
    return nights(scratch, Kind(), 150, 1, 1)[-1]


def test_a_night_against_the_known_answer(scratch, night):
    reports, wrong = command.run_parts(["end-to-end"], Options(records=150, repeat=1, workers=1, scratch=scratch))
    assert not wrong
    told = {f.what: f for f in reports[0].figures}
    assert told["copies found"].reached and told["families of different crystals"].value == 0
    assert 0.05 < told["peak memory"].value < 4
    stages = sum(f.value for what, f in told.items() if what.startswith("stage: "))
    assert stages == pytest.approx(night.seconds)
    assert {"stage: read", "stage: classify", "stage: compare and group", "stage: publish"} <= set(told)


def _changed(night, tmp_path, sql):
    path = tmp_path / "changed.duckdb"
    shutil.copyfile(night.store, path)
    connection = duckdb.connect(str(path))
    connection.execute(sql)
    connection.close()
    return path


def test_a_wrong_merge_is_seen(night, tmp_path):
    crystals = len(set(collection.truth(Kind(), 0, 150).tolist()))
    check_answer(night.store, 150, crystals)
    merged = _changed(
        night,
        tmp_path,
        "UPDATE members SET family_id = (SELECT min(family_id) FROM members WHERE grade = 'near') WHERE grade = 'near' "
        "AND family_id = (SELECT max(family_id) FROM members WHERE grade = 'near')",
    )
    with pytest.raises(AssertionError, match="different crystals"):
        check_answer(merged, 150, crystals)
    with pytest.raises(AssertionError, match="crystals are there"):
        check_answer(night.store, 150, crystals + 1)


def test_a_missed_copy_is_seen(night, tmp_path):
    split = _changed(
        night, tmp_path, "UPDATE members SET family_id = record_id, group_id = record_id WHERE grade = 'near'"
    )
    with pytest.raises(AssertionError, match="copies are found"):
        check_answer(split, 150, len(set(collection.truth(Kind(), 0, 150).tolist())))


def test_a_lost_record_is_seen(night, tmp_path):
    lost = _changed(night, tmp_path, "DELETE FROM members WHERE record_id = (SELECT max(record_id) FROM members)")
    with pytest.raises(AssertionError, match="149 records are grouped"):
        check_answer(lost, 150, len(set(collection.truth(Kind(), 0, 150).tolist())))
    with pytest.raises(AssertionError, match="breaks"):
        end_to_end.sound(type(night)(**{f: getattr(night, f) for f in night.__slots__} | {"store": lost}))


def test_stores_that_differ_are_seen(night, tmp_path):
    workers.compare(night.store, night.store.with_name(night.store.name + ".work") / "work.duckdb")
    other = _changed(night, tmp_path, "UPDATE matches SET strain = strain + 1e-9")
    with pytest.raises(AssertionError, match="matches differ"):
        workers.compare(night.store, other)


def test_a_wrong_answer_ends_in_exit_code_1(monkeypatch, capsys, scratch):
    def mixed_up(options, default):
        crystals, keys, known = structures.one_composition(options, default)
        return crystals, keys, np.zeros_like(known)

    words = ["group", "--records", "60", "--repeat", "1", "--scratch", str(scratch), "--table"]
    assert command.main(words) == 0
    assert "WRONG" not in capsys.readouterr().out
    monkeypatch.setattr(group, "one_composition", mixed_up)
    assert command.main(words) == 1
    assert "WRONG ANSWER in group: 1 crystals fall into" in capsys.readouterr().out
    assert command.main(words[:-1]) == 1
    assert json.loads(capsys.readouterr().out)["wrong"][0]["part"] == "group"


def test_copies_against_all_pairs(monkeypatch):
    copies.brute_force(60)
    monkeypatch.setattr(copies, "_all_pairs", lambda crystals, keys, ids: {})
    with pytest.raises(AssertionError):
        copies.brute_force(60)


def test_heavy_libraries_are_seen(monkeypatch):
    assert start.heavy(["--help"]) == []
    monkeypatch.setattr(start, "HEAVY", ("prefect", "typer"))
    assert start.heavy(["--help"]) == ["typer"]


@pytest.mark.slow
@pytest.mark.parametrize("name", ["ingest", "workers", "copies", "grow", "memory", "nightly", "start"])
def test_part_that_makes_processes_on_few_records(name, scratch, monkeypatch):
    """But for compiling all kernels, which takes a minute of both cores: test_kernel_cache compiles, and asks the
    same."""
    monkeypatch.setattr(start, "compile_all", lambda options: (20.0, 0))
    reports, wrong = command.run_parts([name], Options(records=200, repeat=1, scratch=scratch))
    assert not wrong
    assert all(np.isfinite(f.value) for f in reports[0].figures)


# ---------------------------------------------------------------------------------------------------------------------
# Figures
# ---------------------------------------------------------------------------------------------------------------------


def test_figures_as_a_table():
    report = Report(
        "part",
        {"records": 3},
        (
            Figure("slow", 0.123456, "s", 0.1, 0.2, reach=0.1),
            Figure("gain", 1.80001, "x", reach=1.7, at_least=True),
            Figure("many", 123456.7, "us/structure"),
        ),
    )
    lines = table([report], [("other", "it is not so")]).splitlines()
    assert [line.split() for line in lines[2:5]] == [
        ["part", "slow", "0.1235", "0.1", "0.2", "s", "<=", "0.1", "NO"],
        ["part", "gain", "1.8", "x", ">=", "1.7", "yes"],
        ["part", "many", "123,457", "us/structure"],
    ]
    assert lines[-2:] == ["part: records 3", "WRONG ANSWER in other: it is not so"]
    told = report.as_json()["figures"]
    assert told[0] == {
        "what": "slow", "value": 0.123456, "unit": "s", "least": 0.1, "greatest": 0.2, "reach": "<= 0.1",
        "reached": False,
    }  # fmt: skip
    assert "reach" not in told[2]


def test_exponent_of_growth():
    assert exponent([100, 1000, 10_000], [2.0, 200.0, 20_000.0]) == pytest.approx(2)
    assert exponent([1, 2, 4], [5.0, 10.0, 20.0]) == pytest.approx(1)


def test_memory_of_a_process_and_its_child():
    inner = "import time; b = bytearray(120_000_000); b[::4096] = bytes(len(b[::4096])); time.sleep(1.5)"
    outer = f"import subprocess, sys; subprocess.run([sys.executable, '-c', {inner!r}])"
    process = subprocess.Popen([sys.executable, "-c", outer])
    with MemoryOfTree(process.pid) as memory:
        process.wait()
    assert memory.peak_processes == 2
    assert 120e6 < memory.peak_bytes < 300e6
