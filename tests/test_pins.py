"""Pins: what they do to groups, that they last, and what happens where they contradict each other."""

from __future__ import annotations

from pathlib import Path

import duckdb
import numpy as np
import pytest

from lattice_census.decisions.pin_file import pins_text, read_pins
from lattice_census.decisions.pins import listed_pins
from lattice_census.errors import UsageError
from lattice_census.flows.deciding import import_pins, pin, undo, unpin
from lattice_census.output.check import check_store
from lattice_census.store.connect import open_for_reading

from . import strategies
from .curated import copies, names, row, run_keep, run_night
from .tables_of_structures import crystals, query, write_csv

MEMBERS = "SELECT grade, group_id, family_id, record_id, kept FROM members ORDER BY ALL"


def moved(crystal: strategies.Crystal, by: float) -> strategies.Crystal:
    """One site moved so that the largest shift to the crystal is `by` angstrom, once the mean is removed."""
    cell, positions, tokens = crystal
    n = len(tokens)
    step = np.array([by * n / (n - 1), 0, 0]) @ np.linalg.inv(cell)
    out = positions.copy()
    out[0] += step
    return cell, out, tokens


def pins_of(store: Path) -> list[dict]:
    connection = open_for_reading(store)
    try:
        return listed_pins(connection)
    finally:
        connection.close()


def taken_back(store: Path) -> tuple[str, ...]:
    return tuple(r for (r,) in query(store, "SELECT DISTINCT record_id FROM decisions WHERE ending = 'undone'"))


def group_of(store: Path, label: str, grade: str = "near") -> set[str]:
    sql = (
        "SELECT o.label FROM members m JOIN members o ON o.grade = m.grade AND o.group_id = m.group_id "
        "WHERE m.grade = ? AND m.label = ?"
    )
    return {name for (name,) in query(store, sql, grade, label)}


@pytest.fixture
def store(tmp_path: Path) -> Path:
    """Crystal 0: a plain and kept, b the same key, c near; d just outside near of a; e far away. Crystal 1: f alone."""
    base, other = crystals(2, seed=8)
    rng = np.random.default_rng(3)
    rows = [
        row("a", base, date="2031-01-01"), row("b", strategies.disguise(rng, base, 2)), row("c", moved(base, 0.03)),
        row("d", moved(base, -0.06)), row("e", moved(base, 0.6)), row("f", other),
    ]  # fmt: skip
    write_csv(tmp_path / "t.csv", rows)
    run_night(tmp_path / "census.duckdb", tmp_path / "t.csv")
    store = tmp_path / "census.duckdb"
    assert group_of(store, "a") == {"a", "b", "c"}
    assert group_of(store, "d") == {"d"} and group_of(store, "e") == {"e"}
    return store


def test_a_record_pinned_to_be_kept_is_kept(store: Path):
    ids = names(store)
    pin(store, "keep", ("t.csv:c",), "the relaxed one")
    assert query(store, "SELECT DISTINCT group_id FROM members WHERE grade = 'near' AND label IN ('a', 'b', 'c')") == [
        (ids["c"],)
    ]
    run_keep(store)
    assert query(store, "SELECT rule FROM decisions_in_force") == [("pin",), ("pin",)]


def test_records_pinned_apart_stand_in_two_groups(store: Path):
    before = query(store, MEMBERS)
    done = pin(store, "apart", ("t.csv:a", "t.csv:b"), "another magnetic order")
    assert group_of(store, "a", "key") == {"a"} and group_of(store, "b", "key") == {"b"}
    for grade in ("same", "near"):
        assert "b" not in group_of(store, "a", grade)
    assert query(store, "SELECT count(*) FROM decisions_in_force WHERE record_id = ?", names(store)["b"]) == [(0,)]
    undo(store, str(done["run"]))
    assert query(store, MEMBERS) == before


def test_records_pinned_together_need_a_match_in_the_window(store: Path):
    ids = names(store)
    pin(store, "together", ("t.csv:d", "t.csv:a"), "same phase, badly converged")
    assert group_of(store, "a") >= {"a", "d"}
    sql = (
        "SELECT m.witness_shift_angstrom, t.largest_shift_angstrom, t.grade FROM members m, matches t "
        "WHERE m.grade = 'near' AND m.record_id = ? AND least(t.record_a, t.record_b) = ? "
        "AND greatest(t.record_a, t.record_b) = ?"
    )
    aside = "d" if query(store, "SELECT kept FROM members WHERE grade = 'near' AND label = 'a'")[0][0] else "a"
    stands = min(ids["a"], ids["b"])
    (found,) = query(store, sql, ids[aside], min(stands, ids["d"]), max(stands, ids["d"]))
    assert found[0] == found[1] == pytest.approx(0.06, abs=1e-6) and found[2] == "window"
    refused = pin(store, "together", ("t.csv:e", "t.csv:a"), "wishful")
    assert group_of(store, "e") == {"e"}
    assert query(store, "SELECT value, message FROM findings WHERE code = 'refused_pin'")[0][0] == refused["pin"]
    assert [p["refused"] for p in pins_of(store)] == [False, True]
    unpin(store, refused["pin"])
    assert query(store, "SELECT count(*) FROM findings WHERE code = 'refused_pin'") == [(0,)]


def test_matches_stand_once_a_pair_of_keys_whatever_is_pinned(store: Path):
    sql = (
        "SELECT record_a, record_b, crystal_key_a, crystal_key_b, grade, largest_shift_angstrom, strain, p_matrix, "
        "q_matrix, pairing FROM matches ORDER BY ALL"
    )
    before = query(store, sql)
    ids = names(store)
    pin(store, "apart", ("t.csv:a", "t.csv:b"), "one")
    pin(store, "apart", ("t.csv:b", "t.csv:e"), "two")
    after = query(store, sql)
    assert [m[:5] for m in after] == [m[:5] for m in before]
    assert np.allclose([m[5:7] for m in after], [m[5:7] for m in before], atol=1e-9)
    stands = {min(ids["a"], ids["b"]), ids["c"], ids["d"], ids["e"]}
    assert {r for m in after for r in m[:2]} <= stands


def test_the_store_keeps_its_promises_with_pins(store: Path):
    pin(store, "apart", ("t.csv:a", "t.csv:b"), "one")
    pin(store, "together", ("t.csv:b", "t.csv:d"), "two")
    connection = open_for_reading(store)
    outcomes = check_store(connection, 1000)
    connection.close()
    assert not [o.as_json() for o in outcomes if o.failures]


@pytest.mark.parametrize(
    ("pins", "held", "told"),
    [
        ((("apart", "a", "c"), ("together", "a", "c")), {"a", "b", "c"}, ("first word", "second word")),
        ((("keep", "a"), ("keep", "c")), {"a", "b", "c"}, ("first word", "second word")),
    ],
)
def test_pins_that_contradict_each_other_hold_their_groups(store: Path, pins, held: set[str], told):
    for (kind, *labels), word in zip(pins, told, strict=True):
        done = pin(store, kind, [f"t.csv:{label}" for label in labels], word)
    (finding,) = {m for (m,) in query(store, "SELECT message FROM findings WHERE code = 'pin_conflict'")}
    assert all(word in finding for word in told)
    assert group_of(store, "a") == held
    undo(store, query(store, "SELECT max(run_id)::VARCHAR FROM runs WHERE command = 'keep'")[0][0])
    assert query(store, "SELECT count(*) FROM decisions_in_force") == [(0,)]
    assert run_keep(store, again=taken_back(store))["held"] == 2
    assert query(store, "SELECT count(*) FROM decisions_in_force") == [(0,)]
    unpin(store, done["pin"])
    assert query(store, "SELECT count(*) FROM findings WHERE code = 'pin_conflict'") == [(0,)]
    run_keep(store)
    expected = 1 if pins[0][0] == "apart" else 2
    assert query(store, "SELECT count(*) FROM decisions_in_force") == [(expected,)]


def test_two_records_apart_are_not_set_aside_for_a_third(store: Path):
    pin(store, "keep", ("t.csv:b",), "best")
    pin(store, "apart", ("t.csv:a", "t.csv:c"), "two phases")
    assert group_of(store, "b") == {"a", "b", "c"}
    reasons = query(store, "SELECT DISTINCT reason FROM holds WHERE grade = 'near'")
    assert reasons == [("pin_conflict",)]


def test_pins_last_through_five_further_runs(tmp_path: Path):
    listed = copies(3, 3)
    rows = [row(f"{i}-{j}", c, energy=-1.0 - j / 1000, theory="pbe") for i, j, c in listed]
    path = write_csv(tmp_path / "t.csv", rows)
    store = tmp_path / "census.duckdb"
    run_night(store, path)
    pin(store, "keep", ("t.csv:0-0",), "published")
    pin(store, "keep", ("t.csv:1-0",), "published too")
    pin(store, "apart", ("t.csv:1-0", "t.csv:1-1"), "spins")
    ids = names(store)
    more = copies(3, 8)
    for night in range(5):
        new = [(f"{i}-{j}", c) for i, j, c in more if j == 3 + night]
        rows += [row(label, c, energy=-2.0 - night, theory="scan") for label, c in new]
        write_csv(path, rows)
        run_night(store, path)
        near = dict(query(store, "SELECT record_id, group_id FROM members WHERE grade = 'near'"))
        key = dict(query(store, "SELECT record_id, group_id FROM members WHERE grade = 'key'"))
        assert near[ids["0-1"]] == near[ids["0-2"]] == ids["0-0"]
        for groups in (near, key):
            assert groups[ids["1-0"]] != groups[ids["1-1"]]
    assert [p["kind"] for p in pins_of(store)] == ["keep", "keep", "apart"]
    fresh = tmp_path / "fresh.duckdb"
    run_night(fresh, path)
    listed = [(p["kind"], tuple(r["record_id"] for r in p["records"]), p["reason"]) for p in pins_of(store)]
    import_pins(fresh, listed)
    assert query(fresh, MEMBERS) == query(store, MEMBERS)


def test_pins_go_through_a_file(store: Path, tmp_path: Path):
    pin(store, "keep", ("t.csv:a",), 'because "it" is\nbest \\ and\x7f')
    pin(store, "apart", ("t.csv:b", "t.csv:a"), "spins")
    file = tmp_path / "pins.toml"
    file.write_text(pins_text(pins_of(store)), encoding="utf-8")
    ids = names(store)
    assert read_pins(file) == [
        ("keep", (ids["a"],), 'because "it" is\nbest \\ and\x7f'),
        ("apart", tuple(sorted((ids["a"], ids["b"]))), "spins"),
    ]
    assert import_pins(store, read_pins(file))["known"] == 2
    for p in pins_of(store):
        unpin(store, p["pin"])
    assert pins_of(store) == []
    assert import_pins(store, read_pins(file))["added"] == 2
    file.write_text(file.read_text().replace(ids["b"], "0" * 20), encoding="utf-8")
    with pytest.raises(UsageError, match="does not have 1 of the pinned records"):
        import_pins(store, read_pins(file))


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("pin = 3", "nothing else"), ("[[pin]]\nkind = 'keep'", "Pin 1"), ("[[pin", "not TOML"),
        ("[[pin]]\nkind = 'apart'\nreason = 'x'\n[[pin.record]]\nrecord_id = 'a'", "Pin 1"),
        ("[[pin]]\nkind = 'keep'\nreason = ' '\n[[pin.record]]\nrecord_id = 'a'", "Pin 1"),
    ],
)  # fmt: skip
def test_a_file_that_holds_no_pins_is_refused(tmp_path: Path, text: str, message: str):
    (tmp_path / "pins.toml").write_text(text)
    with pytest.raises(UsageError, match=message):
        read_pins(tmp_path / "pins.toml")


def test_pins_that_cannot_be_meant_are_refused(store: Path):
    for kind, records, reason, message in (
        ("keep", ("t.csv:a",), " ", "needs a reason"),
        ("apart", ("t.csv:a", "t.csv:a"), "x", "two different"),
        ("keep", ("t.csv:nobody",), "x", "has no record"),
        ("together", ("t.csv:a",), "x", "names 2 records"),
    ):
        with pytest.raises(UsageError, match=message):
            pin(store, kind, records, reason)
    pin(store, "keep", ("t.csv:a",), "x")
    with pytest.raises(UsageError, match="says so already"):
        pin(store, "keep", ("t.csv:a",), "y")
    with pytest.raises(UsageError, match="No pin with the number 7"):
        unpin(store, 7)
    with duckdb.connect(str(store), read_only=True) as connection:
        assert len(listed_pins(connection)) == 1
