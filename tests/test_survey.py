"""The survey of a store whose content can be counted by hand, and of one that was ingested."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import duckdb
import pytest

from lattice_census.flows import cli
from lattice_census.lattice.bravais import LATTICE_TYPES
from lattice_census.output.survey import BY, CAUTION, survey, survey_text
from lattice_census.store.connect import open_for_reading
from lattice_census.store.schema import migrate

from .small_store import make_small_store
from .tables_of_structures import crystals, rows_of, write_csv


@pytest.fixture(scope="module")
def small(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return make_small_store(tmp_path_factory.mktemp("survey") / "census.duckdb")


@pytest.fixture(scope="module")
def connection(small: Path) -> Iterator[duckdb.DuckDBPyConnection]:
    opened = open_for_reading(small)
    yield opened
    opened.close()


def test_totals(connection: duckdb.DuckDBPyConnection):
    assert survey(connection).totals == {
        "records": 10, "crystals": 6, "formulas": 4, "sources": 2, "oversized_cells": 2, "oversized_percent": 20.0,
        "pseudo_symmetric": 1, "pseudo_symmetric_percent": 10.0, "symmetry_unsure": 1, "refused": 3,
    }  # fmt: skip


def test_every_table_is_what_was_counted_by_hand(connection: duckdb.DuckDBPyConnection):
    found = {name: list(table.rows) for name, table in survey(connection).tables.items()}
    assert found == {
        "lattice_types": [
            ("tP", 4, 1, 40.0), ("cF", 3, 2, 30.0), ("cP", 1, 1, 10.0), ("mP", 1, 1, 10.0), ("tI", 1, 1, 10.0),
        ],
        "centrings": [("P", 6, 3, 60.0), ("F", 3, 2, 30.0), ("I", 1, 1, 10.0)],
        "lattice_against_crystal": [
            ("mP", 1, 0, 0, 0), ("tP", 0, 4, 0, 0), ("tI", 0, 0, 1, 0), ("cP", 0, 1, 0, 0), ("cF", 0, 0, 0, 3),
        ],
        "given_cells": [(1, 8, 5, 80.0), (2, 1, 1, 10.0), (4, 1, 1, 10.0)],
        "sites": [("2", 3, 2, 30.0), ("3 to 4", 1, 1, 10.0), ("5 to 8", 6, 3, 60.0)],
        "pseudo_symmetric": [("cP", 1, 1, 1, 100.0)],
        "sources": [("alpha", 5, 4, 50.0), ("beta", 5, 4, 50.0)],
        "formulas": [("O2Ti", 6, 3, 60.0), ("ClNa", 2, 1, 20.0), ("ClK", 1, 1, 10.0), ("Si", 1, 1, 10.0)],
        "refusals": [("cell_zero", 2, 2, 2), ("sites_overlap", 1, 1, 1)],
    }  # fmt: skip
    assert survey(connection).tables["lattice_against_crystal"].columns == ("lattice_type", "mP", "tP", "tI", "cF")


def test_classes_of_size_hold_every_number_of_sites_once(tmp_path: Path):
    path = make_small_store(tmp_path / "census.duckdb")
    with duckdb.connect(str(path)) as writing:
        for sites, expected in {1: "1", 2: "2", 3: "3 to 4", 4: "3 to 4", 5: "5 to 8", 8: "5 to 8", 9: "9 to 16",
                                16: "9 to 16", 17: "17 to 32", 1024: "513 to 1024"}.items():  # fmt: skip
            writing.execute("UPDATE records SET sites_primitive = ?", [sites])
            assert survey(writing).tables["sites"].rows == ((expected, 10, 6, 100.0),)


# One row a value: records, crystals, commonest type, its share, oversized, pseudo-symmetric, median number of sites.
DIVIDED: dict[str, list[tuple[Any, ...]]] = {
    "source": [("alpha", 5, 4, "cF", 40.0, 20.0, 0.0, 6.0), ("beta", 5, 4, "tP", 40.0, 20.0, 20.0, 6.0)],
    "split": [
        ("train", 5, 4, "cF", 40.0, 40.0, 0.0, 6.0),
        ("test", 3, 3, "cF", 100 / 3, 0.0, 0.0, 6.0),
        ("validation", 1, 1, "cP", 100.0, 0.0, 100.0, 3.0),
        (None, 1, 1, "tP", 100.0, 0.0, 0.0, 6.0),
    ],
    "theory": [
        ("PBE", 6, 4, "tP", 50.0, 100 / 6, 100 / 6, 6.0),
        (None, 3, 2, "cF", 100.0, 100 / 3, 0.0, 2.0),
        ("SCAN", 1, 1, "tP", 100.0, 0.0, 0.0, 6.0),
    ],
    "formula": [
        ("O2Ti", 6, 3, "tP", 400 / 6, 100 / 6, 100 / 6, 6.0),
        ("ClNa", 2, 1, "cF", 100.0, 0.0, 0.0, 2.0),
        ("ClK", 1, 1, "cF", 100.0, 100.0, 0.0, 2.0),
        ("Si", 1, 1, "mP", 100.0, 0.0, 0.0, 8.0),
    ],
    "elements": [
        ("O", 6, 3, "tP", 400 / 6, 100 / 6, 100 / 6, 6.0),
        ("Ti", 6, 3, "tP", 400 / 6, 100 / 6, 100 / 6, 6.0),
        ("Cl", 3, 2, "cF", 100.0, 100 / 3, 0.0, 2.0),
        ("Na", 2, 1, "cF", 100.0, 0.0, 0.0, 2.0),
        ("K", 1, 1, "cF", 100.0, 100.0, 0.0, 2.0),
        ("Si", 1, 1, "mP", 100.0, 0.0, 0.0, 8.0),
    ],
}


@pytest.mark.parametrize("by", list(BY))
def test_a_divided_survey(connection: duckdb.DuckDBPyConnection, by: str):
    found = survey(connection, by).tables
    rows = [tuple(pytest.approx(v) if isinstance(v, float) else v for v in row) for row in DIVIDED[by]]
    assert list(found[f"by_{by}"].rows) == rows
    cross = found[f"lattice_types_by_{by}"]
    assert [row[0] for row in cross.rows] == [row[0] for row in DIVIDED[by]]
    assert [sum(row[1:]) for row in cross.rows] == [row[1] for row in DIVIDED[by]]
    if by == "source":
        assert cross.columns == ("source", "mP", "tP", "tI", "cP", "cF")
        assert cross.rows == (("alpha", 0, 2, 1, 0, 2), ("beta", 1, 2, 0, 1, 1))


def test_long_tables_are_cut_and_what_is_left_out_is_counted(connection: duckdb.DuckDBPyConnection):
    found = survey(connection, "formula", top=2)
    assert [row[0] for row in found.tables["formulas"].rows] == ["O2Ti", "ClNa"]
    assert found.left_out["formulas"] == 2
    assert found.left_out["by_formula"] == 2
    assert "sources" not in found.left_out
    assert "(2 more; --top shows more rows)" in survey_text(found)


def test_the_page_and_the_json(small: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]):
    def run(*words: str) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["lattice-census", "survey", "--store", str(small), *words])
        code = cli._run()
        told = capsys.readouterr()
        return code, told.out, told.err

    code, page, err = run()
    assert (code, err) == (0, "")
    assert page.startswith("10 records, 6 distinct crystals (by key), 4 formulas, 2 sources; 3 records refused\n")
    assert page.endswith(f"\n\n{CAUTION}\n")
    assert "lattice type  records  crystals  share (%)" in page
    told = json.loads(run("--by", "source", "--json")[1])
    assert told["totals"]["crystals"] == 6
    assert told["lattice_types"][0] == {"lattice_type": "tP", "records": 4, "crystals": 1, "share_percent": 40.0}
    assert told["by_source"][0]["commonest_lattice_type"] == "cF"
    assert told["caution"] == CAUTION
    code, page, err = run("--by", "colour")
    assert code == 2 and "source, split, theory, formula, elements" in err
    assert run("--top", "0")[0] == 2


def test_an_empty_store_has_an_empty_survey(tmp_path: Path):
    with duckdb.connect(str(tmp_path / "empty.duckdb")) as empty:
        migrate(empty)
        found = survey(empty, "elements")
    assert found.totals["records"] == 0 and found.totals["oversized_percent"] is None
    assert all(table.rows == () for table in found.tables.values())
    assert survey_text(found).startswith("0 records")
    json.dumps(found.as_json())


def test_an_ingested_collection_adds_up(tmp_path: Path, ingest: Callable[..., dict[str, Any]]):
    """The crystals are drawn on lattices of each type in turn (strategies.LATTICE_TYPES), and are counted so."""
    write_csv(tmp_path / "t.csv", rows_of(crystals(28)))
    ingest(tmp_path / "t.csv")
    opened = open_for_reading(tmp_path / "census.duckdb")
    found = survey(opened)
    opened.close()
    assert found.totals["records"] == 28
    assert {row[0]: row[1] for row in found.tables["lattice_types"].rows} == dict.fromkeys(LATTICE_TYPES, 2)
    for name in ("lattice_types", "centrings", "given_cells", "sites", "sources", "formulas"):
        assert sum(row[1] for row in found.tables[name].rows) == 28, name
        assert sum(row[3] for row in found.tables[name].rows) == pytest.approx(100), name
