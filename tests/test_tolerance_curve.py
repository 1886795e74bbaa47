"""The curve of families against tolerance: against brute force over all pairs, and against whole runs."""

from __future__ import annotations

import itertools
import shutil
from pathlib import Path

import duckdb
import numpy as np
import pytest

from lattice_census.output.pair_match import match_of
from lattice_census.output.pair_sides import side_of
from lattice_census.output.questions import question_named
from lattice_census.output.tolerance_curve import ToleranceCurve, counted_at, forest_steps, tolerance_curve
from lattice_census.store.connect import open_for_reading
from lattice_census.tolerances import Tolerances

from . import strategies as draw
from .curated import run_group as group_with_pins
from .proven_store import run_group, run_ingest
from .tables_of_structures import query, text_of, write_csv

NEAR = Tolerances()


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two compositions of twelve copies each, from exact ones to ones beyond the window."""
    folder = tmp_path_factory.mktemp("curve")
    rng = np.random.default_rng(411)
    rows = []
    for elements, kind in ((("Ga", "N"), "aP"), (("Mg", "O"), "oP")):
        base = draw.random_crystal(rng, kind, 4, elements, 1.7)
        for i, noise in enumerate((0, 0, 0.004, 0.008, 0.015, 0.02, 0.03, 0.03, 0.045, 0.05, 0.07, 0.09)):
            crystal = draw.disguise(rng, base, 2, noise, noise / 20)
            rows.append({"material_id": f"{elements[0]}{i}", "cif": text_of(crystal)})
    write_csv(folder / "t.csv", rows)
    run_ingest(folder / "census.duckdb", folder / "t.csv")
    run_group(folder / "census.duckdb")
    return folder / "census.duckdb"


def curve_of(path: Path) -> ToleranceCurve:
    connection = open_for_reading(path)
    try:
        found = tolerance_curve(connection)
    finally:
        connection.close()
    assert found is not None
    return found


def components_by_search(nodes: int, edges: list[tuple[int, int]]) -> int:
    """Depth-first search (a plain twin)."""
    beside: dict[int, set[int]] = {i: set() for i in range(nodes)}
    for a, b in edges:
        beside[a].add(b)
        beside[b].add(a)
    left, count = set(range(nodes)), 0
    while left:
        count += 1
        wait = [left.pop()]
        while wait:
            more = beside[wait.pop()] & left
            left -= more
            wait += more
    return count


def test_the_steps_of_a_forest_count_the_components_at_every_limit():
    rng = np.random.default_rng(5)
    for _ in range(30):
        nodes = int(rng.integers(1, 25))
        pairs = np.array(list(itertools.combinations(range(nodes), 2)), np.int64).reshape(-1, 2)
        edges = pairs[rng.random(len(pairs)) < 0.15]
        t = np.round(rng.random(len(edges)), 1)  # with equal ones, and zeros
        steps = forest_steps(nodes, edges, t)
        assert (np.diff(steps) >= 0).all()
        for limit in np.linspace(0, 1, 21).tolist():
            found = nodes - int(np.searchsorted(steps, limit, side="right"))
            assert found == components_by_search(nodes, [tuple(e) for e in edges[t <= limit].tolist()])


def test_the_curve_equals_a_graph_of_all_pairs(store: Path):
    """Every pair of records is verified; nothing is taken from `matches`."""
    from lattice_census.grouping.window import near_window

    connection = open_for_reading(store)
    ids = [r for (r,) in connection.execute("SELECT record_id FROM current_records ORDER BY 1").fetchall()]
    sides = [side_of(connection, r) for r in ids]
    connection.close()
    edges: list[tuple[int, int, float]] = []
    for a, b in itertools.combinations(range(len(ids)), 2):
        if sides[a].composition == sides[b].composition:
            match = match_of(sides[a], sides[b], near_window(NEAR), "merge", NEAR.near_strain)
            if match is not None:
                t = 0.0 if sides[a].crystal_key == sides[b].crystal_key else max(
                    match.largest_shift / NEAR.near_shift, match.strain / NEAR.near_strain
                )  # fmt: skip
                edges.append((a, b, t))
    curve = curve_of(store)
    assert curve.more == 0 and len(curve.steps) > 8
    for t in np.linspace(0, NEAR.window_factor, 61).tolist():
        assert curve.families(t) == components_by_search(len(ids), [(a, b) for a, b, of in edges if of <= t]), t


@pytest.mark.parametrize("place", range(10))
def test_the_curve_equals_a_whole_run_at_each_of_the_ten_tolerances(store: Path, tmp_path: Path, place: int):
    curve = curve_of(store)
    t = float(curve.counted_at[place])
    other = tmp_path / "census.duckdb"
    shutil.copy(store, other)
    run_group(other, recompute=True, near_shift=t * NEAR.near_shift, near_strain=t * NEAR.near_strain)
    families, groups = query(
        other, "SELECT count(DISTINCT family_id), count(DISTINCT group_id) FROM members WHERE grade = 'near'"
    )[0]
    assert (curve.families(t), curve.groups[place]) == (families, groups)
    assert curve_of(other).families(1.0) == families


def test_the_ten_tolerances_see_different_numbers(store: Path):
    """Else the comparison with whole runs would prove little."""
    curve = curve_of(store)
    assert len(curve.counted_at) == 10 and len({curve.families(t) for t in curve.counted_at.tolist()}) >= 6
    assert (curve.groups >= [curve.families(t) for t in curve.counted_at.tolist()]).all()


def test_the_question_answers_as_the_curve(store: Path):
    """`ask tolerance-curve` counts components by another way, in the database."""
    question = question_named("tolerance-curve")
    connection = open_for_reading(store)
    for step in (0.125, 0.03):
        rows = connection.execute(question.sql, {"step": step}).fetchall()
        assert rows[0][0] == 0 and NEAR.window_factor - step < rows[-1][0] <= NEAR.window_factor
        curve = curve_of(store)
        assert [families for *_, families in rows] == [curve.families(t) for t, *_ in rows]
        assert rows[1][1:3] == pytest.approx((step * NEAR.near_shift, step * NEAR.near_strain))
    connection.close()


def test_what_holds_where_matches_are_left_out(store: Path, tmp_path: Path):
    """One match a record: exact up to t = 1 (no crowds here), an upper bound beyond, and said."""
    other = tmp_path / "census.duckdb"
    shutil.copy(store, other)
    run_group(other, recompute=True, matches_per_record=1)
    whole, less = curve_of(store), curve_of(other)
    assert less.more > 0 and len(query(other, "SELECT 1 FROM matches")) < len(query(store, "SELECT 1 FROM matches"))
    for t in np.linspace(0, 1, 41).tolist():
        assert less.families(t) == whole.families(t)
    for t in np.linspace(1, 1.5, 21).tolist():
        assert less.families(t) >= whole.families(t)
    groups = query(other, "SELECT count(DISTINCT group_id) FROM members WHERE grade = 'near'")[0][0]
    assert less.groups[4] == whole.groups[4] == groups and less.counted_at[4] == 1.0


def test_plateaus_are_the_longest_stretches():
    curve = ToleranceCurve(
        7, np.array([0.1, 0.1, 0.5, 0.9, 1.4]), 1.5, 0.05, 0.01, counted_at(1.5), np.zeros(10, np.int64), 0
    )
    assert [curve.families(t) for t in (0.0, 0.1, 0.3, 0.5, 1.0, 1.5)] == [7, 5, 5, 4, 3, 2]
    assert [(p.start, p.end, p.families) for p in curve.plateaus()] == [(0.9, 1.4, 3), (0.1, 0.5, 5), (0.5, 0.9, 4)]
    assert curve.rows()[4][:4] == (1.0, 0.05, 0.01, 3)
    assert counted_at(1.0).tolist() == pytest.approx([0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0])


def test_pins_hold_at_every_tolerance(store: Path, tmp_path: Path):
    """Records pinned together are one family at t = 0, records pinned apart do not match."""
    other = tmp_path / "census.duckdb"
    shutil.copy(store, other)
    labels = dict(query(other, "SELECT label, record_id FROM records"))
    before = curve_of(other)
    connection = duckdb.connect(str(other))
    for number, (kind, a, b) in enumerate((("together", "Ga2", "Ga8"), ("apart", "Mg0", "Mg1")), 1):
        connection.execute(
            "INSERT INTO pins (pin_id, kind, record_id, other_record_id, reason, run_id) VALUES (?, ?, ?, ?, 'why', 1)",
            [number, kind, labels[a], labels[b]],
        )
    connection.close()
    group_with_pins(other)
    families = query(other, "SELECT count(DISTINCT family_id) FROM members WHERE grade = 'near'")[0][0]
    after = curve_of(other)
    assert after.families(1.0) == families
    # Mg0 and Mg1 have one key: pinned apart they are two nodes. Ga2 and Ga8 are joined by a step at t = 0 more.
    assert after.nodes == before.nodes + 1
    assert (after.steps == 0).sum() == (before.steps == 0).sum() + 1


def test_nothing_grouped_is_no_curve(tmp_path: Path):
    rng = np.random.default_rng(3)
    write_csv(tmp_path / "t.csv", [{"material_id": "a", "cif": text_of(draw.random_crystal(rng))}])
    run_ingest(tmp_path / "census.duckdb", tmp_path / "t.csv")
    connection = open_for_reading(tmp_path / "census.duckdb")
    assert tolerance_curve(connection) is None
    connection.close()
