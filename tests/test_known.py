"""Whether structures are known: disguises, noise, near misses, the closest neighbour, refusals."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from lattice_census.errors import UsageError
from lattice_census.ingest.pool import WorkerPool
from lattice_census.ingest.progress import Silent
from lattice_census.output.export import export
from lattice_census.output.known import known
from lattice_census.settings import Settings, SourceSettings
from lattice_census.store.connect import open_for_reading
from lattice_census.store.stages import stored_settings

from . import strategies
from .curated import row, run_night
from .tables_of_structures import crystals, query, text_of, whole_store, write_csv
from .test_pins import moved


def ask_known(store: Path, *paths: Path, grade: str = "near", **of_source) -> list[dict]:
    connection = open_for_reading(store)
    try:
        settings = Settings.model_validate({**stored_settings(connection), "workers": 1})
        with WorkerPool(1) as pool:
            return known(connection, paths, settings, grade, SourceSettings(**of_source), pool, Silent())
    finally:
        connection.close()


def check_many(folder: Path, stored: int, asked: int, seed: int) -> None:
    """Half of the asked ones are disguises of stored crystals (a third of these noisy), the others are new."""
    rng = np.random.default_rng(seed)
    listed = crystals(stored + asked // 2, seed)
    store = folder / "census.duckdb"
    run_night(store, write_csv(folder / "t.csv", [row(f"s{i}", c) for i, c in enumerate(listed[:stored])]))
    rows, truth = [], {}
    for n in range(asked):
        if n % 2:
            i = int(rng.integers(stored))
            noise = {"noise": 0.02, "strain": 0.002} if n % 3 == 0 else {}
            base = strategies.mirror(listed[i]) if n % 5 == 0 else listed[i]
            rows.append(row(f"n{n}", strategies.disguise(rng, base, 4, **noise)))
            truth[f"n{n}"] = f"t.csv:s{i}"
        else:
            rows.append(row(f"n{n}", strategies.disguise(rng, listed[stored + n // 2], 4)))
            truth[f"n{n}"] = None
    before = whole_store(store)
    told = ask_known(store, write_csv(folder / "new.csv", rows))
    assert [r["label"] for r in told] == [r["material_id"] for r in rows]
    for r in told:
        assert r["verdict"] == ("new" if truth[r["label"]] is None else "known"), r
        if truth[r["label"]] is not None:
            assert r["record"] == truth[r["label"]]
    assert {r["grade"] for r in told if r["verdict"] == "known"} >= {"key", "near"}
    assert whole_store(store) == before


def test_disguises_are_known_and_others_are_new(tmp_path: Path):
    check_many(tmp_path, 40, 100, 21)


@pytest.mark.slow
def test_a_thousand_are_told_right(tmp_path: Path):
    check_many(tmp_path, 500, 1000, 22)


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("known")
    listed = crystals(6, 31)
    run_night(folder / "census.duckdb", write_csv(folder / "t.csv", [row(f"s{i}", c) for i, c in enumerate(listed)]))
    return folder / "census.duckdb"


def test_each_grade_has_its_own_verdict(store: Path, tmp_path: Path):
    base = crystals(6, 31)[2]
    rng = np.random.default_rng(0)
    made = {
        "copy": base,
        "key": strategies.disguise(rng, base, 3),
        "same": moved(base, 0.008),
        "near": moved(base, 0.04),
        "window": moved(base, 0.06),
        "far": moved(base, 0.5),
    }
    path = write_csv(tmp_path / "new.csv", [row(name, c) for name, c in made.items()])
    grades = ("copy", "key", "same", "near")
    for asked in grades:
        told = {r["label"]: r for r in ask_known(store, path, grade=asked)}
        for i, name in enumerate(grades):
            assert told[name]["verdict"] == ("known" if i <= grades.index(asked) else "new")
            assert (told[name]["grade"], told[name]["record"]) == (name, "t.csv:s2")
        assert (told["window"]["verdict"], told["window"]["grade"]) == ("new", "window")
        assert told["window"]["shift_angstrom"] == pytest.approx(0.06, abs=1e-6)
        assert (told["far"]["verdict"], told["far"]["record"], told["far"]["shift_angstrom"]) == ("new", None, None)
    assert told["near"]["shift_angstrom"] == pytest.approx(0.04, abs=1e-6)


def test_any_format_and_what_cannot_be_read(store: Path, tmp_path: Path):
    base, other = crystals(6, 31)[3], crystals(1, 99)[0]
    folder = tmp_path / "mixed"
    folder.mkdir()
    (folder / "a.cif").write_text(text_of(base))
    (folder / "b.cif").write_text("data_odd\n_cell_length_a 3\n")
    (folder / "c.cif").write_text(text_of(other))
    told = ask_known(store, folder, folder / "a.cif")
    assert [(r["file"], r["label"], r["verdict"]) for r in told] == [
        ("mixed/a.cif", "a", "known"), ("mixed/b.cif", "b", "refused"), ("mixed/c.cif", "c", "new"),
        ("a.cif", "a", "known"),
    ]  # fmt: skip
    assert told[1]["message"]
    write_csv(tmp_path / "odd.csv", [{"name": "x", "text": text_of(base)}])
    assert ask_known(store, tmp_path / "odd.csv", structure_column="text")[0]["verdict"] == "known"
    with pytest.raises(UsageError, match="no file or folder"):
        ask_known(store, tmp_path / "nothing.cif")


@pytest.mark.parametrize("form", ["cif", "csv", "parquet", "extxyz", "poscar"])
def test_an_export_is_known_in_full(store: Path, tmp_path: Path, form: str):
    connection = open_for_reading(store)
    export(connection, tmp_path / "out", form=form)
    connection.close()
    (place,) = (p for p in (tmp_path / "out").iterdir() if p.name.startswith("structures"))
    told = ask_known(store, place, grade="key")
    assert len(told) == 6 and {r["verdict"] for r in told} == {"known"}


def test_the_neighbour_of_many_is_the_closest(tmp_path: Path):
    """Twelve noisy copies, each its own key: brute force over all of them names the same one."""
    from lattice_census.cell.canonical import canonicalise
    from lattice_census.grouping.verification import match
    from lattice_census.tolerances import Tolerances

    rng = np.random.default_rng(7)
    base = crystals(1, 41)[0]
    stored = [strategies.disguise(rng, base, 1, noise=0.02, strain=0.001) for _ in range(12)]
    asked = [strategies.disguise(rng, base, 1, noise=0.02, strain=0.001) for _ in range(4)]
    store = tmp_path / "census.duckdb"
    run_night(store, write_csv(tmp_path / "t.csv", [row(f"s{i}", c) for i, c in enumerate(stored)]))
    told = ask_known(store, write_csv(tmp_path / "new.csv", [row(f"n{i}", c) for i, c in enumerate(asked)]))
    for r, new in zip(told, asked, strict=True):
        measured = []
        for i, old in enumerate(stored):
            pair = canonicalise(strategies.batch([new, old]), Tolerances()).crystals
            found = match(pair, Tolerances())
            measured.append((int(found.grade[0]), float(found.largest_shift[0]), f"t.csv:s{i}"))
        grade, shift, name = min(measured)
        assert r["record"] == name and r["shift_angstrom"] == pytest.approx(shift, abs=1e-6)
        assert r["grade"] == ("same", "near", "window")[grade]


def test_withdrawn_records_are_not_known(tmp_path: Path):
    from lattice_census.flows.deciding import withdraw

    base = crystals(1, 51)[0]
    path = write_csv(tmp_path / "t.csv", [row("a", base)])
    store = tmp_path / "census.duckdb"
    run_night(store, path)
    assert ask_known(store, path)[0]["verdict"] == "known"
    withdraw(store, "t.csv:a", "wrong")
    assert ask_known(store, path)[0]["verdict"] == "new"
    assert query(store, "SELECT count(*) FROM current_records") == [(0,)]
