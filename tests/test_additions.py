"""Records added to what was grouped: only pairs with a new one are compared, and the result is that of all pairs."""

from __future__ import annotations

from contextlib import closing
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice_census.cell.canonical import canonicalise
from lattice_census.flows.deciding import pin, withdraw
from lattice_census.grouping import additions, composition, jobs, stage, work
from lattice_census.grouping.composition import Grouping, Options, group_composition
from lattice_census.grouping.earlier import Earlier, MayBeCrowded
from lattice_census.model.batch import select
from lattice_census.output.check import check_store
from lattice_census.store.connect import open_for_reading
from lattice_census.tolerances import Tolerances

from . import strategies as draw
from .curated import run_keep, run_night
from .tables_of_structures import query, rows_of, write_csv
from .test_group_stage import MATCHES, MEMBERS, collection, run_group
from .test_group_together import collection as crystals_of_compositions
from .test_group_together import noisy, rows
from .test_layer_store import collection as layers
from .test_layer_store import frames

T = Tolerances()
MORE = "SELECT record_id FROM more_matches ORDER BY 1"
STATE = (MEMBERS, MATCHES, MORE, "SELECT composition, digest, records, keys FROM grouped_compositions ORDER BY 1")


def known_of(found: Grouping, ids: list[str], there: np.ndarray, separate: bool) -> Earlier:
    """What a grouping of some of the records told of their pairs."""
    place = {name: i for i, name in enumerate(ids)}
    old = np.isin(ids, found.ids)
    pairs = [[place[found.ids[a]], place[found.ids[b]]] for a, b in found.matches.pairs.tolist()]
    match = found.matches
    return Earlier(
        old, there, np.array(pairs, np.int64).reshape(-1, 2), match.proper_grade if separate else match.grade,
        match.largest_shift, match.strain, match.proper_shift, match.proper_strain,
        np.isin(ids, found.ids[found.more]), len(ids),
    )  # fmt: skip


@pytest.mark.parametrize("mirror_images", ["merge", "separate"])
@pytest.mark.parametrize("most", [2, 32])
def test_with_what_is_known_the_result_is_that_of_all_pairs(most: int, mirror_images: str):
    rng = np.random.default_rng(17)
    crystals, part = crystals_of_compositions(rng)
    chosen = rng.integers(0, len(crystals), 20)
    crystals += [noisy(rng, crystals[i], 0.01 * (n % 2)) for n, i in enumerate(chosen.tolist())]
    part = np.concatenate([part, part[chosen]])
    result = canonicalise(draw.batch(crystals), T)
    n = len(crystals)
    ids = [f"r{i:03d}" for i in rng.permutation(n)]
    keys, rank = np.array(result.crystal_key), rng.permutation(n)
    options = Options(mirror_images, matches_per_record=most)
    whole = group_composition(result.crystals, keys.tolist(), ids, rank, T, options, part)
    everything = np.ones(n, bool)
    dropped = unsure = 0
    for _ in range(12):
        old = np.flatnonzero(rng.random(n) < rng.uniform(0.2, 0.95))
        before = group_composition(
            select(result.crystals, old), keys[old].tolist(), [ids[i] for i in old], rank[old], T, options,
            np.unique(part[old], return_inverse=True)[1],
        )  # fmt: skip
        unsure += int(before.more.any())
        earlier = known_of(before, ids, everything, mirror_images == "separate")
        found = group_composition(result.crystals, keys.tolist(), ids, rank, T, options, part, earlier)
        assert found.added and found.counts["verified"] < whole.counts["verified"]
        gone = {tuple(sorted(pair)) for pair in found.ids[found.dropped].tolist()}
        expected, mine = rows(whole, everything), rows(found, everything)
        mine |= {k: v for k, v in rows(before, np.ones(len(old), bool)).items()
                 if k.startswith("r") and tuple(k.split()) not in gone}  # fmt: skip
        assert mine == expected
        dropped += len(gone)
    assert (unsure > 0) == (most == 2) and dropped > 0  # for records that stand for a key no longer, at least


def test_of_crowds_nothing_is_taken_over():
    rng = np.random.default_rng(18)
    base = draw.random_crystal(rng, "oP", 4, ("Si", "O"))
    result = canonicalise(draw.batch([noisy(rng, base, 0.02) for _ in range(20)]), T)
    ids, rank = [f"r{i:02d}" for i in rng.permutation(20)], rng.permutation(20)
    old = np.arange(6)
    options = Options(crowded=8)
    whole = group_composition(result.crystals, result.crystal_key, ids, rank, T, options)
    before = group_composition(
        select(result.crystals, old), result.crystal_key[:6], ids[:6], np.argsort(np.argsort(rank[:6])), T, options
    )
    assert not before.more.any() and whole.counts["crowded"]
    earlier = known_of(before, ids, np.ones(20, bool), False)
    found = group_composition(result.crystals, result.crystal_key, ids, rank, T, options, None, earlier)
    assert not found.added and not len(found.dropped)
    assert rows(found, np.ones(20, bool)) == rows(whole, np.ones(20, bool))


def test_what_could_be_crowded_is_compared_as_a_whole():
    """Of 20 records, some without their crystals: bounds that leave no crowd give the result of all pairs."""
    rng = np.random.default_rng(19)
    base = [draw.random_crystal(rng, kind, 4, ("Si", "O")) for kind in ("oP", "mP", "aP", "tI")]
    result = canonicalise(draw.batch([noisy(rng, base[i % 4], 0.02) for i in range(20)]), T)
    ids, rank = [f"r{i:02d}" for i in rng.permutation(20)], rng.permutation(20)
    old = np.arange(15)
    keys = result.crystal_key
    for crowded in (4, 5, 6, 9):
        options = Options(crowded=crowded)
        before = group_composition(select(result.crystals, old), keys[:15], ids[:15], rank[:15], T, options)
        there = np.ones(20, bool)
        there[[i for i in range(15) if i % 4 != 1]] = False  # new are three of the first kinds: of kind 1, two
        new = [i for i in range(20) if i >= 15 and i % 4 == 1] + old.tolist()
        part = [i for i in range(20) if i in new]
        earlier = replace(known_of(before, [ids[i] for i in part], there[part], False), crowding=before.crowding)
        rows_there = np.array([i for i in part if there[i]])
        told = [keys[i] for i in part], [ids[i] for i in part], rank[part], T, options
        arguments = (select(result.crystals, rows_there), *told, None, earlier)
        expected = group_composition(select(result.crystals, np.array(part)), *told)
        if expected.crowding[0] > crowded:
            with pytest.raises(MayBeCrowded):
                group_composition(*arguments)
        else:
            found = group_composition(*arguments)
            assert found.crowding is not None and found.crowding >= expected.crowding
            mine = rows(found, np.ones(len(part), bool)) | {
                k: v for k, v in rows(before, np.ones(15, bool)).items() if k.startswith("r")
            }
            assert mine == rows(expected, np.ones(len(part), bool))
    with pytest.raises(MayBeCrowded):
        group_composition(*arguments[:-1], replace(earlier, crowding=None))


@pytest.fixture(scope="module")
def listed() -> list[dict[str, Any]]:
    return collection(9)


@pytest.mark.parametrize(
    ("settings", "large", "by_night"),
    [
        ({}, False, False),
        ({"matches_per_record": 2}, False, True),
        ({"matches_per_record": 2}, True, False),
        ({"mirror_images": "separate"}, True, True),
    ],
)
def test_a_store_that_grew_equals_one_made_at_once(
    tmp_path: Path, ingest, listed, monkeypatch, settings: dict[str, Any], large: bool, by_night: bool
):
    """Grown in random steps: what was grouped is set aside in between, or stands where it was; large compositions, of
    which all crystals may be read, are bundles of their own."""
    if large:
        monkeypatch.setattr(additions, "CROWDED", 4)
        monkeypatch.setattr(work, "CROWDED", 4)
    compared: list[int] = []
    whole = composition.group_composition

    def counted(*arguments: Any) -> Grouping:
        found = whole(*arguments)
        compared.append(found.counts["verified"] if found.added else -1)
        return found

    monkeypatch.setattr(work, "group_composition", counted)
    rng = np.random.default_rng(2)
    shuffled = [listed[i] for i in rng.permutation(len(listed))]
    table, one, grown = tmp_path / "t.csv", tmp_path / "one.duckdb", tmp_path / "grown.duckdb"
    for end in (25, 26, 45, 60):
        write_csv(table, shuffled[:end])
        if by_night:
            counts = run_night(grown, table, **settings)["group"]
        else:
            ingest(table, store=grown, **settings)
            counts = run_group(grown, **settings)
        assert query(grown, "SELECT count(*) FROM outdated_matches") == [(0,)]
        assert query(grown, "SELECT count(*) FROM outdated_compositions") == [(0,)]
    assert counts["compared"] < 120 and sum(c >= 0 for c in compared) >= 3, compared
    ingest(table, store=one, **settings)
    run_group(one, **settings)
    for asked in STATE:
        assert query(grown, asked) == query(one, asked)


def test_matches_that_are_not_stored_tie_records_too(tmp_path: Path, ingest):
    """Two near families side by side: each record has two closer ones of its own, so that no match between families is
    stored. What is added is too far from one of them to be compared with it, and yet its records decide who of the
    other has more matches than are stored."""
    rng = np.random.default_rng(21)
    cell, positions, tokens = draw.random_crystal(rng, "oP", 4, ("Si", "O"))
    strains = [0.0, 0.0004, 0.0008, 0.0142, 0.0146, 0.0150, -0.0012]
    listed = rows_of([(np.exp(strain) * cell, positions, tokens) for strain in strains])
    table, one, grown = tmp_path / "t.csv", tmp_path / "one.duckdb", tmp_path / "grown.duckdb"
    settings: dict[str, Any] = {"matches_per_record": 2}
    run_night(grown, write_csv(table, listed[:6]), **settings)
    assert query(grown, "SELECT count(*) FROM more_matches") == [(6,)]
    assert query(grown, "SELECT count(*) FROM matches") == [(6,)]
    assert run_night(grown, write_csv(table, listed), **settings)["group"]["compared"] < 21
    ingest(table, store=one, **settings)
    run_group(one, **settings)
    for asked in STATE:
        assert query(grown, asked) == query(one, asked)
    assert query(one, "SELECT count(*) FROM more_matches") == [(6,)]


def test_of_crowds_in_a_store_nothing_is_taken_over(tmp_path: Path, ingest, monkeypatch):
    """What was crowded is compared as a whole, whether many pairs were left or the coordinates alone left too many."""
    monkeypatch.setattr(work, "Options", partial(Options, crowded=6))
    for module, name in ((additions, "CROWDED"), (work, "CROWDED"), (additions, "DENSE"), (composition, "DENSE")):
        monkeypatch.setattr(module, name, 6)
    rng = np.random.default_rng(22)
    kinds = [draw.random_crystal(rng, kind, 4, ("Si", "O")) for kind in ("oP", "mP")]
    few = [noisy(rng, kinds[1], 0.01) for _ in range(8)]
    listed = rows_of([noisy(rng, kinds[0], 0.01) for _ in range(16)] + few)
    order = [*range(12), 16, 17, 18, 12, 19, 20, 13, 14, 15, 21, 22, 23]
    table, one, grown = tmp_path / "t.csv", tmp_path / "one.duckdb", tmp_path / "grown.duckdb"
    for end in (15, 16, 18, 24):
        run_night(grown, write_csv(table, [listed[i] for i in order[:end]]))
    ingest(table, store=one)
    run_group(one)
    assert query(one, "SELECT count(*) > 10 FROM more_matches") == [(True,)]
    for asked in STATE:
        assert query(grown, asked) == query(one, asked)


@pytest.mark.parametrize("by_night", [False, True])
def test_what_a_worker_cannot_take_over_is_compared_whole_in_a_second_pass(
    tmp_path: Path, ingest, listed, monkeypatch, by_night: bool
):
    """Every worker says that there may be crowds: the result is that of all pairs; no earlier match is sent again."""
    table, one, grown = tmp_path / "t.csv", tmp_path / "one.duckdb", tmp_path / "grown.duckdb"
    shuffled = [listed[i] for i in np.random.default_rng(2).permutation(len(listed))]
    run_night(grown, write_csv(table, shuffled[:45]))
    whole, chunk, told = composition.group_composition, work.group_chunk, []

    def unsure(*arguments: Any) -> Grouping:
        if arguments[7] is not None:
            raise MayBeCrowded
        return whole(*arguments)

    def seen(job: work.GroupJob) -> Any:
        told.append(job.known is not None)
        return chunk(job)

    monkeypatch.setattr(work, "group_composition", unsure)
    monkeypatch.setattr(stage, "group_chunk", seen)
    write_csv(table, shuffled)
    if by_night:
        run_night(grown, table)
    else:
        ingest(table, store=grown)
        run_group(grown)
    assert told == [True, False]
    ingest(table, store=one)
    run_group(one)
    for asked in STATE:
        assert query(grown, asked) == query(one, asked)


@pytest.mark.parametrize("by_night", [False, True])
def test_ids_that_change_are_noted_however_the_store_grew(tmp_path: Path, ingest, listed, by_night: bool):
    """Each step's changes are those between the members before and after it."""
    table, store = tmp_path / "t.csv", tmp_path / "census.duckdb"
    before: dict[tuple[str, str], tuple[str, str]] = {}
    rng = np.random.default_rng(6)
    shuffled = [listed[i] for i in rng.permutation(len(listed))]
    for rows_now in (shuffled[:30], shuffled[:45], shuffled[5:50], shuffled):
        run = query(store, "SELECT max(run_id) FROM runs")[0][0] if before else 0
        write_csv(table, rows_now)
        if by_night:
            run_night(store, table)
        else:
            ingest(table, store=store)
            run_group(store)
        found = query(
            store, "SELECT grade, record_id, group_id, family_id FROM members WHERE grade IN ('same', 'near')"
        )
        now = {(grade, record): (group, family) for grade, record, group, family in found}
        expected = {(*k, *v, *now.get(k, (None, None))) for k, v in before.items() if now.get(k) != v}
        noted = query(
            store,
            "SELECT grade, record_id, group_before, family_before, group_after, family_after FROM id_changes "
            "WHERE run_id > ? AND grade IN ('same', 'near')",
            run,
        )
        assert set(noted) == expected and len(noted) == len(expected)
        before = now


def test_what_changed_otherwise_is_compared_anew(tmp_path: Path, ingest, listed):
    """Replaced, amended, withdrawn and pinned records between two groupings, and several ingests before one."""
    table, store, fresh = tmp_path / "t.csv", tmp_path / "census.duckdb", tmp_path / "fresh.duckdb"
    ingest(write_csv(table, listed[:40]), store=store)
    run_group(store)
    changed = [dict(row) for row in listed]
    changed[3]["cif"], changed[8]["cif"] = listed[59]["cif"], listed[12]["cif"]
    ingest(write_csv(table, listed[:50]), store=store)
    assert query(store, "SELECT count(*) > 0 FROM outdated_matches") == [(True,)]
    ingest(write_csv(table, changed), store=store)
    gone = query(store, "SELECT record_id FROM records WHERE label = ?", listed[20]["material_id"])[0][0]
    pair = query(
        store,
        "SELECT any_value(a.record_id), any_value(b.record_id) FROM records a JOIN records b USING (composition) "
        "WHERE a.label = ? AND b.label = ?",
        changed[30]["material_id"],
        changed[34]["material_id"],
    )[0]
    withdraw(store, gone, "a test")
    if all(pair):
        pin(store, "apart", list(pair), "a test")
    run_group(store)
    ingest(write_csv(table, changed), store=fresh)
    withdraw(fresh, gone, "a test")
    if all(pair):
        pin(fresh, "apart", list(pair), "a test")
    run_group(fresh)
    for asked in STATE:
        assert query(store, asked) == query(fresh, asked)


def test_layers_that_were_added_equal_layers_read_at_once(tmp_path: Path, ingest):
    """A layer has no volume: what could match a new one is told by its area per site."""
    listed = layers()
    del listed["unclear"]
    grown, one, file = tmp_path / "grown.duckdb", tmp_path / "one.duckdb", tmp_path / "layers.xyz"
    for end in (4, 6, 9, len(listed)):
        file.write_text(frames(dict(list(listed.items())[:end])), encoding="utf-8")
        ingest(file, store=grown)
        run_group(grown)
    ingest(file, store=one)
    run_group(one)
    assert query(grown, "SELECT count(*) > 3 FROM matches WHERE ends_with(composition, ' layer')") == [(True,)]
    for asked in STATE:
        assert query(grown, asked) == query(one, asked)


@pytest.mark.parametrize("after", ["night", "keep", "ingest", "withdraw"])
def test_whatever_follows_an_interrupted_night_sees_no_groups_as_they_were(
    tmp_path: Path, ingest, listed, monkeypatch, after: str
):
    """The night ends when one composition of several is replaced; what is published next satisfies every check."""
    table, store, fresh = tmp_path / "t.csv", tmp_path / "census.duckdb", tmp_path / "fresh.duckdb"
    run_night(store, write_csv(table, listed[:45]))
    published = store.read_bytes()
    changed = [*listed[:3], {**listed[3], "cif": listed[58]["cif"]}, *listed[5:]]
    write_csv(table, changed)
    commit, done = stage._commit, []

    def once(*arguments: Any) -> None:
        if done:
            raise KeyboardInterrupt
        done.append(commit(*arguments))

    with monkeypatch.context() as patched:
        patched.setattr(stage, "_commit", once)
        patched.setattr(stage, "TOGETHER", 1)
        patched.setattr(jobs, "MOST_RECORDS", 1)
        with pytest.raises(KeyboardInterrupt):
            run_night(store, table)
    assert done and store.read_bytes() == published
    record = query(store, "SELECT record_id FROM records WHERE label = ?", listed[10]["material_id"])[0][0]
    if after == "night":
        run_night(store, table)
    elif after == "keep":
        run_keep(store)
    elif after == "ingest":
        ingest(write_csv(table, changed[:-1]), store=store)
    else:
        withdraw(store, record, "a test")
    with closing(open_for_reading(store)) as connection:
        assert [o.name for o in check_store(connection, 20) if o.failures] == []
    run_night(store, write_csv(table, changed))
    run_night(fresh, table)
    if after == "withdraw":
        withdraw(fresh, record, "a test")
    for asked in STATE:
        assert query(store, asked) == query(fresh, asked)
