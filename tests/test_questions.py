"""The named questions: their headers, and the answer of each to a store whose content can be counted by hand."""

from __future__ import annotations

import re
import shutil
from collections.abc import Iterator
from importlib.resources import files
from pathlib import Path
from typing import Any

import duckdb
import pytest

from lattice_census.errors import UsageError
from lattice_census.output.ask import Limits, ask, lock_down
from lattice_census.output.questions import bind, parse_question, question_named, questions, reduced_formula
from lattice_census.store.connect import open_for_reading

from .small_store import DAY, make_small_store
from .small_store import record_id as rid

# For each question: parameters as typed, and the rows (values of all columns, in order) counted by hand from
# small_store.RECORDS. Records 11 (gone) and 12 (withdrawn) count in no result.
EXPECTED: dict[str, list[tuple[dict[str, str], list[tuple[Any, ...]]]]] = {
    "centrings": [
        ({}, [("P", 6, 3, 60.0), ("F", 3, 2, 30.0), ("I", 1, 1, 10.0)]),
        ({"source": "beta"}, [("P", 4, 3, 80.0), ("F", 1, 1, 20.0)]),
    ],
    "changes": [
        ({}, [("new", rid(10), "beta", "b5", "beta.csv", "Si"), ("amended", rid(5), "alpha", "a3", "alpha.csv", "O2Ti"),
              ("missing", rid(11), "alpha", "gone", "alpha.csv", "O2Ti")]),
        ({"run": "2"}, [("replaced", rid(6), "beta", "b3", "beta.csv", "O2Ti")]),
        ({"run": "4"}, []),
    ],
    "decisions": [
        ({}, [(2, "beta:b3", "alpha:a3", "near", "energy", "rerun", 0.03, 0.004, 4, "curator", "looked at", None,
               None)]),
        ({"ended": "true", "record": "alpha:a1"},
         [(1, "alpha:a2", "alpha:a1", "key", "date", "copy", 0.0, 0.0, 3, "curator", None, "undone", 4)]),
        ({"grade": "key"}, []),
    ],
    "duplicates-by-reason": [
        ({}, [("copy", 1, 1, 0), ("other_cell", 1, 0, 1), ("rerun", 1, 0, 1), ("supercell", 1, 0, 1)]),
        ({"grade": "copy"}, [("copy", 1, 1, 0)]),
        ({"grade": "near"}, [("mirror", 1, 0, 1)]),  # the reason of the match: by their cells it would be rerun
    ],
    "duplicates-by-source": [
        ({}, [("alpha", "beta", 3, 2), ("alpha", "alpha", 1, 1)]),
        ({"grade": "near"}, [("alpha", "beta", 1, 1)]),
    ],
    "duplicates-by-theory": [
        ({}, [("PBE", "PBE", 2, 1), ("PBE", "SCAN", 1, 1), (None, None, 1, 1)]),
        ({"grade": "near"}, [("PBE", "PBE", 1, 1)]),
    ],
    "elements": [
        ({}, [("O", 6, 3, 1, 2), ("Ti", 6, 3, 1, 2), ("Cl", 3, 2, 2, 2), ("Na", 2, 1, 1, 2), ("K", 1, 1, 1, 1),
              ("Si", 1, 1, 1, 1)]),
    ],
    "energy-spread": [
        ({}, [(rid(1), "O2Ti", "PBE", 3, 2, -8.02, -8.00, 0.02)]),
        ({"least": "0.03"}, []),
        ({"grade": "near", "least": "0.1"}, [(rid(5), "O2Ti", "PBE", 2, 2, -8.10, -7.90, 0.2)]),
    ],
    "findings": [
        ({}, [("leak", "alpha:a1", "alpha:a2", "key", 2.0, "one family stands in several splits", rid(1), rid(2)),
              ("symmetry_failed", "beta:b5", None, None, None, "no cell found", rid(10), None)]),
        ({"code": "leak", "source": "beta"}, []),
        ({"source": "beta"}, [("symmetry_failed", "beta:b5", None, None, None, "no cell found", rid(10), None)]),
    ],
    "group-of": [
        ({"record": "alpha:a4"},
         [(rid(7), "alpha", "a4", True, "ClNa", 2, None, None, "train", 0.0, 0.0),
          (rid(8), "beta", "b4", False, "ClNa", 2, None, None, "test", 0.0, 0.0)]),
        ({"record": rid(6), "grade": "near"},
         [(rid(5), "alpha", "a3", True, "O2Ti", 6, "PBE", -8.1, "train", 0.0, 0.0),
          (rid(6), "beta", "b3", False, "O2Ti", 3, "PBE", -7.9, "validation", 0.03, 0.004)]),
    ],
    "group-sizes": [
        ({}, [(1, 4, 4, 0), (2, 1, 2, 1), (4, 1, 4, 3)]),
        ({"grade": "copy"}, [(1, 8, 8, 0), (2, 1, 2, 1)]),
    ],
    "id-changes": [
        ({}, [(4, "key", rid(3), "beta", "b1", rid(12), rid(1), rid(1), rid(1))]),
        ({"run": "3"}, []),
        ({"grade": "copy"}, []),
    ],
    "ladder": [
        ({}, [("mP", "oP", 1, 1, 0.004, 0.004), ("mP", "tP", 1, 1, 0.012, 0.012)]),
        ({"within": "0.01"}, [("mP", "oP", 1, 1, 0.004, 0.004)]),
    ],
    "largest-groups": [
        ({}, [(rid(1), "alpha:a1", "O2Ti", 4, 2), (rid(7), "alpha:a4", "ClNa", 2, 2)]),
        ({"least": "3"}, [(rid(1), "alpha:a1", "O2Ti", 4, 2)]),
        ({"grade": "copy"}, [(rid(1), "alpha:a1", "O2Ti", 2, 1)]),
    ],
    "last-run": [({}, [(4, "withdraw", "done", DAY, DAY, "withdrawn", "1")])],
    "lattice-against-crystal": [
        ({}, [("cP", "tP", 1, 1)]),
        ({"all": "true"},
         [("tP", "tP", 4, 1), ("cF", "cF", 3, 2), ("cP", "tP", 1, 1), ("mP", "mP", 1, 1), ("tI", "tI", 1, 1)]),
    ],
    "lattice-types": [
        ({}, [("tP", 4, 1, 40.0), ("cF", 3, 2, 30.0), ("cP", 1, 1, 10.0), ("mP", 1, 1, 10.0), ("tI", 1, 1, 10.0)]),
        ({"source": "alpha"}, [("cF", 2, 2, 40.0), ("tP", 2, 1, 40.0), ("tI", 1, 1, 20.0)]),
        ({"formula": "NaCl"}, [("cF", 2, 1, 100.0)]),
    ],
    "lattice-types-by-element": [
        ({"element": "Cl"}, [("Cl", "cF", 3, 2)]),
        ({}, [("Cl", "cF", 3, 2), ("K", "cF", 1, 1), ("Na", "cF", 2, 1), ("O", "tP", 4, 1), ("O", "cP", 1, 1),
              ("O", "tI", 1, 1), ("Si", "mP", 1, 1), ("Ti", "tP", 4, 1), ("Ti", "cP", 1, 1), ("Ti", "tI", 1, 1)]),
    ],
    "lattice-types-by-formula": [
        ({}, [("O2Ti", "cP", 1, 1), ("O2Ti", "tI", 1, 1), ("O2Ti", "tP", 4, 1), ("ClK", "cF", 1, 1),
              ("ClNa", "cF", 2, 1), ("Si", "mP", 1, 1)]),
        ({"least": "3"}, [("O2Ti", "cP", 1, 1), ("O2Ti", "tI", 1, 1), ("O2Ti", "tP", 4, 1)]),
    ],
    "lattice-types-by-size": [
        ({}, [(2, "cF", 3, 2), (3, "cP", 1, 1), (6, "tP", 4, 1), (6, "tI", 1, 1), (8, "mP", 1, 1)]),
    ],
    "lattice-types-by-source": [
        ({}, [("alpha", "cF", 2, 2, 40.0), ("alpha", "tP", 2, 1, 40.0), ("alpha", "tI", 1, 1, 20.0),
              ("beta", "tP", 2, 1, 40.0), ("beta", "cF", 1, 1, 20.0), ("beta", "cP", 1, 1, 20.0),
              ("beta", "mP", 1, 1, 20.0)]),
    ],
    "lattice-types-by-split": [
        ({}, [("test", "cF", 1, 1, 100 / 3), ("test", "mP", 1, 1, 100 / 3), ("test", "tP", 1, 1, 100 / 3),
              ("train", "cF", 2, 2, 40.0), ("train", "tP", 2, 1, 40.0), ("train", "tI", 1, 1, 20.0),
              ("validation", "cP", 1, 1, 100.0), (None, "tP", 1, 1, 100.0)]),
    ],
    "leakage": [
        ({}, [("test", "train", 2, 2, 3, 200 / 3), ("train", "test", 2, 3, 2, 60.0)]),
        ({"grade": "near"}, [("train", "validation", 1, 1, 1, 100.0), ("validation", "train", 1, 1, 1, 100.0)]),
    ],
    "leaking-groups": [
        ({}, [(rid(1), "O2Ti", 2, 3, ["test", "train"], ["alpha:a2", "alpha:a1", "beta:b1"]),
              (rid(7), "ClNa", 2, 2, ["test", "train"], ["beta:b4", "alpha:a4"])]),
        ({"grade": "copy"}, [(rid(1), "O2Ti", 2, 2, ["test", "train"], ["alpha:a2", "alpha:a1"])]),
    ],
    "missing": [({}, [(rid(11), "alpha", "gone", "alpha.csv", "O2Ti", 3)])],
    "most-polymorphic": [
        ({}, [("O2Ti", 3, 6, 3, 2)]),
        ({"least": "1"}, [("O2Ti", 3, 6, 3, 2), ("ClNa", 1, 2, 1, 2), ("ClK", 1, 1, 1, 1), ("Si", 1, 1, 1, 1)]),
    ],
    "nearest-higher-type": [
        ({}, [(rid(10), "beta", "b5", "Si", "mP", "oP", 0.004)]),
        ({"within": "0.001"}, []),
        ({"lattice-type": "tP"}, []),
    ],
    "nearly-oversized": [({}, [(rid(10), "beta", "b5", "Si", 8, 2, 0.015)])],
    "only-in-one-source": [
        ({}, [("alpha", 5, 4, 2, 50.0), ("beta", 5, 4, 2, 50.0)]),
        ({"grade": "copy"}, [("alpha", 5, 4, 4, 100.0), ("beta", 5, 5, 5, 100.0)]),
    ],
    "oversized-cells": [({}, [("alpha", 4, 1, 8, 2), ("beta", 2, 1, 12, 6)])],
    "oversized-records": [
        ({}, [(rid(9), "alpha", "a5", "ClK", 4, 8, 2, 0.0), (rid(3), "beta", "b1", "O2Ti", 2, 12, 6, 0.0)]),
        ({"least": "3"}, [(rid(9), "alpha", "a5", "ClK", 4, 8, 2, 0.0)]),
        ({"source": "beta"}, [(rid(3), "beta", "b1", "O2Ti", 2, 12, 6, 0.0)]),
    ],
    "pins": [
        ({}, [(2, "apart", "alpha:a4", "beta:b4", "spins", "curator", DAY, 3, None)]),
        ({"removed": "yes"}, [(1, "keep", "beta:b2", None, "best run", "curator", DAY, 2, 3),
                              (2, "apart", "alpha:a4", "beta:b4", "spins", "curator", DAY, 3, None)]),
    ],
    "polymorphs": [
        ({"formula": "TiO2"},
         [("anatase", "tI", "I4_1/amd", "tI12", 6, 11.0, "PBE", -8.10, 0.0, 1, "alpha:a3"),
          ("rutile", "tP", "P4_2/mnm", "tP6", 6, 10.0, "PBE", -8.02, 0.08, 3, "beta:b1"),
          ("nearly_cubic", "cP", "P4/mmm", "tP3", 3, 12.5, "PBE", -7.90, 0.20, 1, "beta:b3"),
          ("rutile", "tP", "P4_2/mnm", "tP6", 6, 10.0, "SCAN", -9.0, 0.0, 1, "beta:b2")]),
        ({"formula": "ClNa"}, [("salt", "cF", "Fm-3m", "cF8", 2, 22.4, None, None, None, 2, "alpha:a4")]),
        ({"formula": "O2Ti", "theory": "SCAN"},
         [("rutile", "tP", "P4_2/mnm", "tP6", 6, 10.0, "SCAN", -9.0, 0.0, 1, "beta:b2")]),
    ],
    "pseudo-symmetric": [({}, [("alpha", 5, 0, 0.0, 4, 0), ("beta", 5, 1, 20.0, 4, 1)])],
    "pseudo-symmetric-records": [
        ({}, [(rid(6), "beta", "b3", "O2Ti", "cP", "tP", "P4/mmm")]),
        ({"source": "alpha"}, []),
        ({"formula": "Si"}, []),
    ],
    "refusals-by-file": [
        ({}, [("alpha", "alpha.csv", 9, 7, 2, 200 / 9), ("beta", "odd.cif", 1, 0, 1, 100.0)]),
    ],
    "refusals-by-reason": [
        ({}, [("cell_zero", "parse", 2, 2, 2, "message of flat"),
              ("sites_overlap", "parse", 1, 1, 1, "message of dense\x1b[31m")]),
        ({"source": "beta"}, [("cell_zero", "parse", 1, 1, 1, "message of odd")]),
    ],
    "refused-records": [
        ({"reason": "cell_zero"},
         [("alpha", "alpha.csv", 20, "flat", "parse", "cell_zero", "message of flat"),
          ("beta", "odd.cif", 0, "odd", "parse", "cell_zero", "message of odd")]),
        ({"reason": "cell_zero", "source": "beta"},
         [("beta", "odd.cif", 0, "odd", "parse", "cell_zero", "message of odd")]),
    ],
    "runs": [
        ({}, [(4, "withdraw", "done", DAY, DAY, "1", "{}", '{"withdrawn": 1}'),
              (3, "ingest", "done", DAY, DAY, "1", "{}", '{"new": 1}'),
              (2, "ingest", "done", DAY, DAY, "1", "{}", '{"replaced": 1}'),
              (1, "ingest", "done", DAY, DAY, "1", "{}", '{"new": 11}')]),
    ],
    "settings": [
        ({}, [("parse", "alpha", "2.5"), ("verify", "near_shift", "0.05"), ("verify", "near_strain", "0.01"),
              ("verify", "window_factor", "1.5"), ("keep", "zeta", "1")]),
    ],
    "sources": [
        ({}, [("alpha", "file", "/in/alpha", 1, 7, 5, 2, 3), ("beta", "folder", "/in/beta", 2, 5, 5, 1, 3)]),
    ],
    "sources-in-common": [
        ({}, [("alpha", "beta", 2, 4, 4)]),
        ({"grade": "copy"}, []),
    ],
    "space-groups": [
        ({}, [(136, None, "P4_2/mnm", 4, 1, 1), (225, None, "Fm-3m", 3, 2, 2), (14, None, "P2_1/c", 1, 1, 1),
              (123, None, "P4/mmm", 1, 1, 1), (141, None, "I4_1/amd", 1, 1, 1)]),
        ({"source": "alpha"}, [(136, None, "P4_2/mnm", 2, 1, 1), (225, None, "Fm-3m", 2, 2, 2),
                               (141, None, "I4_1/amd", 1, 1, 1)]),
    ],
    "structure-types": [
        ({}, [("AB", 225, None, "Fm-3m", "cF8", "a b", 2, 2, 3)]),
        ({"least": "3"}, []),
    ],
    "symmetry-failures": [({}, [])],
    "symmetry-unsure": [({}, [(rid(6), "beta", "b3", "O2Ti", 123, "P4/mmm", "cP", "tP")])],
    "theories": [
        ({}, [("PBE", "alpha", 3, 3, -8.1, -8.0), ("PBE", "beta", 3, 3, -8.02, -5.0),
              ("SCAN", "beta", 1, 1, -9.0, -9.0), (None, "alpha", 2, 0, None, None), (None, "beta", 1, 0, None, None)]),
    ],
    # Two crystals, joined by a match at t = max(0.03 / 0.05, 0.004 / 0.01) = 0.6.
    "tolerance-curve": [
        ({}, [(i / 8, i / 8 * 0.05, i / 8 * 0.01, 2 if i / 8 < 0.6 else 1) for i in range(13)]),
        ({"step": "0.5"}, [(0.0, 0.0, 0.0, 2), (0.5, 0.025, 0.005, 2), (1.0, 0.05, 0.01, 1), (1.5, 0.075, 0.015, 1)]),
    ],
    "versions": [
        ({"record": "beta:b3"},
         [(1, "replaced", 2, "rutile", -7.0, "PBE", "train", None, "c0"),
          (2, "present", None, "nearly_cubic", -7.9, "PBE", "validation", DAY, "c6")]),
    ],
    "volumes": [
        ({"least-ratio": "1.1"}, [("O2Ti", 6, 3, 10.0, 10.0, 12.5, 1.25)]),
        ({"least-ratio": "1.3"}, []),
    ],
    "withdrawn": [({}, [(rid(12), "alpha", "bad", "bad run", "curator", DAY, 4)])],
}  # fmt: skip


@pytest.fixture(scope="module")
def small(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return make_small_store(tmp_path_factory.mktemp("questions") / "census.duckdb")


@pytest.fixture(scope="module")
def connection(small: Path) -> Iterator[duckdb.DuckDBPyConnection]:
    opened = open_for_reading(small)
    lock_down(opened, Limits())
    yield opened
    opened.close()


def _near(value: Any) -> Any:
    return pytest.approx(value, abs=1e-9) if isinstance(value, float) else value


@pytest.mark.parametrize("name", list(EXPECTED))
def test_the_answer_is_what_was_counted_by_hand(connection: duckdb.DuckDBPyConnection, name: str):
    question = question_named(name)
    for given, rows in EXPECTED[name]:
        answer = ask(connection, question.sql, bind(question, given, connection), Limits())
        assert [tuple(r) for r in answer.rows] == [tuple(_near(v) for v in row) for row in rows], given
        assert not answer.cut


def test_layers_and_crystals_without_a_space_group(small: Path, tmp_path: Path):
    path = tmp_path / "census.duckdb"
    shutil.copyfile(small, path)
    with duckdb.connect(str(path)) as writing:
        writing.execute(
            "UPDATE crystal_types SET lattice_type = 'op', crystal_lattice_type = 'op', space_group = NULL, "
            "layer_group = 37, space_group_symbol = 'pmmm', strain_to_oP = NULL, strain_to_tP = NULL, "
            "plane_strain_to_tp = 0.007 WHERE crystal_key = 'leaning'"
        )
        writing.execute(
            "UPDATE crystal_types SET crystal_lattice_type = NULL, space_group = NULL, space_group_symbol = NULL, "
            "pearson = NULL, wyckoff = NULL, pseudo_symmetric = NULL, symmetry_unsure = NULL, "
            "symmetry_failure = 'no cell found' WHERE crystal_key = 'sylvite'"
        )
    opened = open_for_reading(path)

    def rows(name: str) -> list[tuple[Any, ...]]:
        question = question_named(name)
        return list(ask(opened, question.sql, bind(question, {}, opened), Limits()).rows)

    assert rows("symmetry-failures") == [(rid(9), "alpha", "a5", "ClK", 2, "cF", "no cell found")]
    assert (None, 37, "pmmm", 1, 1, 1) in rows("space-groups")
    assert (None, None, None, 1, 1, 1) in rows("space-groups")
    assert rows("ladder") == [("op", "tp", 1, 1, 0.007, 0.007)]
    assert rows("nearest-higher-type") == [(rid(10), "beta", "b5", "Si", "op", "tp", 0.007)]
    assert rows("structure-types") == []
    assert rows("lattice-against-crystal") == [("cP", "tP", 1, 1)]
    assert ("p", 1, 1, 10.0) in rows("centrings")
    opened.close()


def test_every_question_has_an_expected_answer_and_every_parameter_is_tried():
    assert set(EXPECTED) == set(questions())
    assert len(questions()) >= 25
    for name, question in questions().items():
        if name != "symmetry-failures":  # test_layers_and_crystals_without_a_space_group has one
            assert any(rows for _, rows in EXPECTED[name]), name
        tried = {p.replace("-", "_") for given, _ in EXPECTED[name] for p in given}
        assert {p.name for p in question.parameters} == tried, name


def test_headers_and_statements_agree(connection: duckdb.DuckDBPyConnection):
    options = {"sql", "tables", "store", "rows", "seconds", "memory", "out", "json", "help"}
    for entry in (files("lattice_census.sql") / "questions").iterdir():
        assert re.fullmatch(r"[a-z]+(-[a-z]+)*\.sql", entry.name) and entry.name != "tables.sql"
    sentences = [q.sentence for q in questions().values()]
    assert len(set(sentences)) == len(sentences)
    for question in questions().values():
        (statement,) = connection.extract_statements(question.sql)
        assert statement.type == duckdb.StatementType.SELECT, question.name
        assert statement.named_parameters == {p.name for p in question.parameters}, question.name
        assert not options & {p.name for p in question.parameters}, question.name
        assert re.search(r"\bORDER BY\b[^()]*(\([^()]*\)[^()]*)*$", question.sql), f"{question.name} has no last order"
        for p in question.parameters:
            if p.name == "grade" and question.name not in ("id-changes", "decisions"):
                assert (p.type, p.default) == ("GRADE", "key"), question.name


def test_answers_have_distinct_columns_that_name_their_unit(connection: duckdb.DuckDBPyConnection):
    for name, tried in EXPECTED.items():
        question = question_named(name)
        cursor = connection.execute(question.sql, bind(question, tried[0][0], connection))
        columns = [d[0] for d in cursor.description]
        assert len(set(columns)) == len(columns)
        assert not {"HUGEINT", "DECIMAL"} & {str(d[1]).split("(")[0] for d in cursor.description}, name
        for column in columns:
            if "energy" in column and column != "with_energy":
                assert column.endswith("_ev_per_site"), (name, column)
            if "volume" in column and column != "volume_ratio":
                assert column.endswith("_angstrom3_per_site"), (name, column)
        cursor.fetchall()


def test_a_header_is_parsed():
    question = parse_question(
        "q",
        "-- Which?\n-- $a INTEGER: first\n-- $b_c DOUBLE = -1.5e3: second: with a colon\n-- $d VARCHAR = 'x y': third\n"
        "-- $e BOOLEAN = true: fourth\n-- $f FORMULA = NULL: fifth\n\nSELECT $a -- inside\n",
    )
    assert question.sentence == "Which?"
    assert [(p.name, p.type, p.required, p.default, p.meaning) for p in question.parameters] == [
        ("a", "INTEGER", True, None, "first"),
        ("b_c", "DOUBLE", False, -1500.0, "second: with a colon"),
        ("d", "VARCHAR", False, "x y", "third"),
        ("e", "BOOLEAN", False, True, "fourth"),
        ("f", "FORMULA", False, None, "fifth"),
    ]
    assert question.sql == "SELECT $a -- inside"


@pytest.mark.parametrize(
    "text",
    [
        "SELECT 1",
        "-- No question\nSELECT 1",
        "-- Which?\n",
        "-- Which?\n-- $a INTEGER\nSELECT $a",
        "-- Which?\n-- $a NUMBER = 1: x\nSELECT $a",
        "-- Which?\n-- $a INTEGER = x: x\nSELECT $a",
        "-- Which?\n-- $a VARCHAR = x: x\nSELECT $a",
        "-- Which?\n-- $a INTEGER = '1': x\nSELECT $a",
        "-- Which?\n-- $a INTEGER: x\n-- $a INTEGER: y\nSELECT $a",
        "-- Which?\n-- and more\nSELECT 1",
    ],
)
def test_a_header_that_says_too_little_is_refused(text: str):
    with pytest.raises(ValueError, match="^q: "):
        parse_question("q", text)


def test_an_unknown_question_lists_the_known_ones():
    with pytest.raises(UsageError) as error:
        question_named("polymorph")
    assert "Did you mean: polymorphs" in str(error.value)
    assert all(name in str(error.value) for name in questions())
    assert question_named("group_of").name == "group-of"


@pytest.mark.parametrize(
    ("name", "given", "message"),
    [
        ("group-of", {}, "needs --record"),
        ("group-of", {"record": "alpha:nobody"}, "no record 'nobody'"),
        ("group-of", {"record": "alpha:a1", "size": "3"}, r"no parameter --size[\s\S]*--grade GRADE = key"),
        ("largest-groups", {"least": "many"}, "--least many: give a whole number"),
        ("largest-groups", {"least": "99999999999999999999"}, "give a whole number"),
        ("energy-spread", {"least": "nan"}, "--least nan: give a number"),
        ("largest-groups", {"grade": "close"}, "copy, key, near"),
        ("lattice-against-crystal", {"all": "perhaps"}, "true or false"),
        ("polymorphs", {"formula": "Ti(OH)"}, "a chemical formula"),
        ("settings", {"stage": "parse"}, "takes no parameters"),
    ],
)
def test_a_wrong_parameter_is_refused(connection: duckdb.DuckDBPyConnection, name: str, given: dict[str, str], message):
    with pytest.raises(UsageError, match=message):
        bind(question_named(name), given, connection)


def test_values_are_bound_and_never_pasted(connection: duckdb.DuckDBPyConnection):
    question = question_named("lattice-types")
    values = bind(question, {"source": "alpha' OR 'x' = 'x"}, connection)
    assert ask(connection, question.sql, values, Limits()).rows == ()


def test_formulas_are_read_in_any_order():
    for text, expected in (("TiO2", "O2Ti"), ("O4Ti2", "O2Ti"), ("NaCl", "ClNa"), ("Si8", "Si"), ("CHO", "CHO")):
        assert reduced_formula(text) == expected
    for text in ("", "tio2", "Ti-O", "Ti0O2", "O2Ti "):
        with pytest.raises(ValueError):
            reduced_formula(text)
