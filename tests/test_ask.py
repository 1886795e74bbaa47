"""The command `ask`: what it refuses, its limits, and what reaches the terminal or a file."""

from __future__ import annotations

import csv
import json
import os
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import duckdb
import polars as pl
import pytest

from lattice_census.errors import UsageError, WorkError
from lattice_census.flows import cli
from lattice_census.model.columns import TABLES, VIEWS
from lattice_census.output.answer_file import write_answer
from lattice_census.output.ask import Limits, ask, lock_down
from lattice_census.output.tables import cell_text, heading, json_value, number, safe, table_text
from lattice_census.store.connect import open_for_reading

from .small_store import make_small_store


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a store and files that no query may reach."""
    made = tmp_path_factory.mktemp("ask")
    make_small_store(made / "census.duckdb")
    (made / "secret.csv").write_text("a,b\n1,2\n")
    (made / "secret.json").write_text('{"a": 1}')
    pl.DataFrame({"a": [1]}).write_parquet(made / "secret.parquet")
    with duckdb.connect(str(made / "other.duckdb")) as other:
        other.execute("CREATE TABLE z AS SELECT 1 AS a")
    return made


@pytest.fixture
def connection(folder: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[duckdb.DuckDBPyConnection]:
    monkeypatch.chdir(folder)
    opened = open_for_reading(folder / "census.duckdb")
    lock_down(opened, Limits())
    yield opened
    opened.close()


@pytest.fixture
def census(
    folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> Callable[..., tuple[int, str, str]]:
    """Run the command in this process; returns exit code, stdout, stderr."""
    monkeypatch.chdir(folder)

    def run(*words: str) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["lattice-census", *words])
        code = cli._run()
        told = capsys.readouterr()
        return code, told.out, told.err

    return run


REFUSED_KINDS = [
    "LOAD json",
    "INSTALL json",
    "CREATE TEMP TABLE x (a INTEGER)",
    "CREATE TEMP MACRO f(x) AS x + 1",
    "CREATE TABLE x AS SELECT 1",
    "SET threads = 1",
    "RESET threads",
    "SET VARIABLE x = 1",
    "PRAGMA version",
    "ATTACH 'other.duckdb'",
    "DETACH census",
    "USE temp",
    "COPY (SELECT 1) TO 'out.csv'",
    "COPY records FROM 'secret.csv'",
    "EXPORT DATABASE 'out'",
    "IMPORT DATABASE 'out'",
    "EXPLAIN SELECT 1",
    "EXPLAIN ANALYZE SELECT 1",
    "EXPLAIN ANALYZE INSERT INTO seen VALUES ('a', 'b', 'c')",
    "PREPARE p AS SELECT 1",
    "EXECUTE p",
    "CALL pragma_version()",
    "CHECKPOINT",
    "VACUUM",
    "ANALYZE",
    "BEGIN",
    "COMMIT",
    "INSERT INTO seen VALUES ('a', 'b', 'c')",
    "DELETE FROM records",
    "UPDATE records SET label = 'x'",
    "DROP TABLE records",
    "ALTER TABLE records ADD COLUMN x INTEGER",
    "COMMENT ON TABLE records IS 'x'",
    "PIVOT records ON source",
    "SELECT 1; SELECT 2",
    "SELECT 1; DROP TABLE records",
    "SET enable_external_access = true; SELECT 1",
    "",
    "-- nothing",
    "SELECT FROM WHERE",
]

REFUSED_REACHES = [
    "FROM read_csv('secret.csv')",
    "FROM read_text('secret.csv')",
    "FROM read_blob('secret.csv')",
    "FROM read_json('secret.json')",
    "FROM read_json_objects('secret.json')",
    "FROM read_parquet('secret.parquet')",
    "FROM parquet_metadata('secret.parquet')",
    "FROM sniff_csv('secret.csv')",
    "FROM glob('*')",
    "FROM 'secret.csv'",
    "FROM 'secret.parquet'",
    "FROM 'other.duckdb'",
    "FROM read_duckdb('other.duckdb')",
    "FROM query('FROM read_csv(''secret.csv'')')",
    "FROM query('CREATE TEMP TABLE x (a INTEGER)')",
    "FROM json_execute_serialized_sql(json_serialize_sql('FROM read_text(''secret.csv'')'))",
    "FROM frame_of_python",
    "SELECT getenv('HOME')",
    "FROM enable_logging('QueryLog', storage := 'file', storage_path := 'log')",
    "FROM enable_profiling()",
    "FROM duckdb_secrets()",
    "WITH x AS (INSERT INTO seen VALUES ('a', 'b', 'c') RETURNING *) FROM x",
    "SELECT $a",
    "SELECT ?",
    "SELECT nothing FROM records",
]

ANSWERED = [
    ("SELECT count(*) FROM records", ((12,),)),
    ("WITH x AS (SELECT 1 AS a) SELECT a FROM x", ((1,),)),
    ("VALUES (1, 'a')", ((1, "a"),)),
    ("FROM sources SELECT source ORDER BY ALL", (("alpha",), ("beta",))),
    ("(SELECT 1)", ((1,),)),
    ("SELECT 1;", ((1,),)),
    ("SELECT 1; -- with a word after it", ((1,),)),
    (
        "FROM (PIVOT sources ON kind IN ('file') USING count(*) GROUP BY source) ORDER BY ALL",
        (("alpha", 1), ("beta", 0)),
    ),
    ("SELECT list_transform([1, 2], lambda x: x + 1)", (([2, 3],),)),
]


@pytest.mark.parametrize("sql", REFUSED_KINDS)
def test_only_one_select_is_let_through(connection: duckdb.DuckDBPyConnection, sql: str):
    with pytest.raises(UsageError):
        ask(connection, sql, {}, Limits())


@pytest.mark.parametrize("sql", REFUSED_REACHES)
def test_a_select_reaches_the_store_and_nothing_else(connection: duckdb.DuckDBPyConnection, sql: str):
    frame_of_python = pl.DataFrame({"a": [1]})
    with pytest.raises(UsageError):
        ask(connection, sql, {}, Limits())
    assert len(frame_of_python) == 1
    assert sorted(p.name for p in Path.cwd().iterdir() if p.name != "out") == [
        "census.duckdb", "other.duckdb", "secret.csv", "secret.json", "secret.parquet",
    ]  # fmt: skip


@pytest.mark.parametrize(("sql", "rows"), ANSWERED)
def test_a_select_is_answered(connection: duckdb.DuckDBPyConnection, sql: str, rows: tuple[tuple[object, ...], ...]):
    assert ask(connection, sql, {}, Limits()).rows == rows


def test_describing_is_selecting(connection: duckdb.DuckDBPyConnection):
    for sql in ("DESCRIBE records", "SHOW TABLES", "SUMMARIZE sources"):
        assert ask(connection, sql, {}, Limits()).rows


def test_the_store_is_as_it_was(folder: Path, connection: duckdb.DuckDBPyConnection):
    before = (folder / "census.duckdb").read_bytes()
    ask(connection, "SELECT * FROM records", {}, Limits())
    assert (folder / "census.duckdb").read_bytes() == before


def test_a_long_query_is_stopped(connection: duckdb.DuckDBPyConnection):
    begun = time.monotonic()
    with pytest.raises(WorkError, match="stopped after 0.3 s.*--seconds"):
        ask(connection, "SELECT count(*) FROM range(1000000) a, range(1000000) b WHERE a.range % 7 = b.range % 3", {},
            Limits(seconds=0.3))  # fmt: skip
    assert time.monotonic() - begun < 5
    assert ask(connection, "SELECT 1", {}, Limits()).rows == ((1,),)


def test_a_large_query_is_stopped(folder: Path):
    opened = open_for_reading(folder / "census.duckdb")
    lock_down(opened, Limits(memory="50MB"))
    with pytest.raises(WorkError, match="more memory than 50MB.*--memory"):
        ask(opened, "SELECT * FROM range(30000000) ORDER BY hash(range)", {}, Limits(memory="50MB"))
    opened.close()


def test_a_query_that_hears_nothing_ends_the_process(folder: Path):
    """A list that one function builds is beyond DuckDB's own limit of memory, and is not interrupted while it grows."""
    begun = time.monotonic()
    done = subprocess.run(
        [sys.executable, "-c", "from lattice_census.flows.cli import main; main()", "ask", "--sql",
         "SELECT len(range(2000000000))", "--memory", "50MB", "--seconds", "1"],
        cwd=folder, capture_output=True, text=True, timeout=120,
    )  # fmt: skip
    assert done.returncode == 4
    assert "stopped after 1 s" in done.stderr or "more memory than 50MB" in done.stderr
    assert time.monotonic() - begun < 60


def test_rows_are_cut_and_it_is_said(census: Callable[..., tuple[int, str, str]]):
    code, out, err = census("ask", "--sql", "SELECT * FROM range(25)", "--rows", "10")
    assert code == 0
    assert len(out.splitlines()) == 12
    assert "more rows than the 10" in err and "--rows" in err
    code, out, err = census("ask", "--sql", "SELECT * FROM range(10)", "--rows", "10", "--json")
    assert (code, err) == (0, "")
    assert json.loads(out)["cut"] is False
    assert json.loads(census("ask", "--sql", "SELECT * FROM range(11)", "--rows", "10", "--json")[1])["cut"] is True
    assert len(census("ask", "--sql", "SELECT * FROM range(10001)")[1].splitlines()) == 10_002


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("--sql", "SELECT 1", "--rows", "0"), "--rows 0"),
        (("--sql", "SELECT 1", "--seconds", "0"), "--seconds 0"),
        (("--sql", "SELECT 1", "--memory", "much"), "--memory much"),
        (("--sql", "SELECT 1", "--memory", "1KB"), "at least 16MB"),
        (("--sql", "SELECT 1", "--memory", "2GB'; SET threads=1; --"), "--memory"),
        (("sources", "--sql", "SELECT 1"), "Give one of: a question, --sql"),
        (("--sql", "SELECT 1", "--formula", "O2Ti"), "--formula"),
        (("nobody-asked",), "There is no question 'nobody-asked'"),
        (("polymorphs",), "needs --formula"),
        (("polymorphs", "--formula"), "--formula has no value"),
        (("polymorphs", "--formula", "TiO2", "--formula", "TiO2"), "given twice"),
        (("polymorphs", "TiO2"), "'TiO2' stands alone"),
        (("sources", "--colour", "red"), "no parameter --colour"),
        (("sources", "--out", "secret.csv"), "exists already"),
        (("sources", "--out", "new.xlsx"), "has to end in .csv or .parquet"),
        (("sources", "--out", "nowhere/new.csv"), "no folder"),
        (("--sql", "DROP TABLE records"), "Only a SELECT"),
        (("--sql", "FROM read_csv('secret.csv')"), "sees the store and nothing else"),
    ],
)
def test_a_command_that_cannot_be_meant_so_says_why(census: Callable[..., tuple[int, str, str]], words, message: str):
    code, out, err = census("ask", *words)
    assert (code, out) == (2, "")
    assert message in err


def test_the_list_and_the_tables(census: Callable[..., tuple[int, str, str]]):
    code, out, err = census("ask")
    assert (code, err) == (0, "")
    assert "polymorphs: Which distinct crystals of one formula are there" in out
    assert "    --formula FORMULA: the formula (has to be given)" in out
    listed = json.loads(census("ask", "--json")[1])
    assert {
        "name": "grade",
        "type": "GRADE",
        "required": False,
        "default": "key",
        "meaning": "grade of the groups",
    } in [p for q in listed if q["name"] == "group-sizes" for p in q["parameters"]]
    code, out, err = census("ask", "tables")
    assert (code, err) == (0, "")
    assert census("ask", "--tables")[1] == out
    found = {t["name"]: t for t in json.loads(census("ask", "--tables", "--json")[1])}
    assert set(found) == set(TABLES) | set(VIEWS)
    for name, table in TABLES.items():
        assert found[name]["meaning"] == table.meaning
        assert [(c["name"], c["type"], c["meaning"]) for c in found[name]["columns"]] == [
            tuple(c) for c in table.columns
        ]
    meanings = {c["name"]: c["meaning"] for c in found["current_records"]["columns"]}
    assert meanings["energy_ev_per_site"] == "Energy in eV per site of the given cell; NULL without a unit."


def test_a_question_is_answered_in_every_form(census: Callable[..., tuple[int, str, str]], tmp_path: Path):
    code, out, err = census("ask", "lattice-types", "--formula", "TiO2")
    assert (code, err) == (0, "")
    assert out.splitlines() == [
        "lattice_type  records  crystals  share_percent",
        "------------  -------  --------  -------------",
        "tP                  4         1          66.67",
        "cP                  1         1          16.67",
        "tI                  1         1          16.67",
    ]
    told = json.loads(census("ask", "lattice-types", "--formula=TiO2", "--json")[1])
    assert told["question"] == "lattice-types"
    assert told["parameters"] == {"source": None, "formula": "O2Ti"}
    assert told["columns"][0] == {"name": "lattice_type", "type": "VARCHAR"}
    assert told["rows"][0] == {
        "lattice_type": "tP",
        "records": 4,
        "crystals": 1,
        "share_percent": pytest.approx(200 / 3),
    }
    code, out, err = census("ask", "lattice-types", "--formula", "TiO2", "--out", str(tmp_path / "a.csv"))
    assert (code, err) == (0, "")
    assert "3 rows written" in out
    with (tmp_path / "a.csv").open(newline="") as f:
        assert list(csv.reader(f))[:2] == [
            ["lattice_type", "records", "crystals", "share_percent"], ["tP", "4", "1", repr(400 / 6)],
        ]  # fmt: skip
    census("ask", "lattice-types", "--formula", "TiO2", "--out", str(tmp_path / "a.parquet"))
    assert pl.read_parquet(tmp_path / "a.parquet")["lattice_type"].to_list() == ["tP", "cP", "tI"]
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.csv", "a.parquet"]
    assert census("ask", "lattice-types", "--source", "nobody")[1] == "(no rows)\n"


def test_files_hold_every_row_unless_a_limit_is_given(connection: duckdb.DuckDBPyConnection, tmp_path: Path):
    for ending in ("csv", "parquet"):
        whole, cut = tmp_path / f"whole.{ending}", tmp_path / f"cut.{ending}"
        sql = "SELECT range AS a, [range, 1] AS b, NULL AS c, range % 2 = 0 AS a FROM range(25000) ORDER BY range"
        assert write_answer(connection, sql, {}, whole, Limits(rows=None)) == (25_000, False)
        assert write_answer(connection, sql, {}, cut, Limits(rows=12_000)) == (12_000, True)
        read = pl.read_csv if ending == "csv" else pl.read_parquet
        assert read(whole)["a"].sum() == 25_000 * 24_999 // 2
        assert read(cut).columns == ["a", "b", "c", "a_2"]
        assert len(read(cut)) == 12_000
        empty = tmp_path / f"empty.{ending}"
        assert write_answer(connection, "SELECT 1 AS a WHERE false", {}, empty, Limits(rows=None)) == (0, False)
        assert read(empty).columns == ["a"]
    assert (tmp_path / "whole.csv").read_text().splitlines()[2] == '1,"[1, 1]",,false'
    with pytest.raises(UsageError, match="exists already"):
        write_answer(connection, "SELECT 1", {}, tmp_path / "cut.csv", Limits())


def test_a_file_that_fails_halfway_is_not_there(connection: duckdb.DuckDBPyConnection, tmp_path: Path):
    sql = "SELECT CASE WHEN range = 20000 THEN error('halfway') ELSE range END AS a FROM range(30000)"
    for ending in ("csv", "parquet"):
        with pytest.raises(UsageError, match="halfway"):
            write_answer(connection, sql, {}, tmp_path / f"a.{ending}", Limits(rows=None))
    assert not list(tmp_path.iterdir())


def test_nothing_that_steers_a_terminal_gets_there(census: Callable[..., tuple[int, str, str]]):
    code, out, err = census("ask", "refused-records", "--reason", "sites_overlap")
    assert code == 0
    assert "\x1b" not in out and "dense\\x1b[31m" in out
    hostile = "SELECT 'a' || chr(27) || ']0;x' || chr(7) || chr(10) || chr(8238) || 'b' || chr(155) AS \"h\x1bd\""
    code, out, err = census("ask", "--sql", hostile)
    assert code == 0
    assert out.splitlines() == [
        "h\\x1bd",
        "-" * len("a\\x1b]0;x\\x07\\n\\u202eb\\x9b"),
        "a\\x1b]0;x\\x07\\n\\u202eb\\x9b",
    ]
    code, out, err = census("ask", "--sql", "SELECT CAST('q' || chr(27) || '[1m' AS INTEGER)")
    assert code == 2 and "\x1b" not in err and "\\x1b[1m" in err
    assert "\x1b" not in census("ask", "--sql", hostile, "--json")[1]


def test_numbers_are_written_one_way():
    written = {
        -0.0: "0", 7: "7", -1234567: "-1,234,567", 1.0: "1.000", 12.34567: "12.35", 9.9996: "10.00",
        999.96: "1,000", 1234.56: "1,235", 1234567.8: "1,234,568", 0.00123456: "0.001235", -8.123456: "-8.123",
        1.23456e-5: "1.235e-05", 1e20: "1.000e+20", float("inf"): "inf",
    }  # fmt: skip
    assert {value: number(value) for value in written} == written
    assert number(float("nan")) == "nan"
    assert [cell_text(v) for v in (None, True, False, [1, 2.5, None], {"a": "x\n"}, b"\x01")] == [
        "-", "yes", "no", "[1, 2.500, -]", "{a: x\\n}", "01",
    ]  # fmt: skip
    assert len(cell_text("x" * 500)) == 72 and cell_text("x" * 500).endswith("...")
    assert heading("volume_angstrom3_per_site") == "volume (Å3/site)"
    assert heading("spread_ev_per_site") == "spread (eV/site)"
    assert heading("lattice_type") == "lattice type"
    assert json_value([float("nan"), {"a": (1,)}, b"\xff"]) == [None, {"a": [1]}, "ff"]
    assert safe("plain é 晶 \u200b\u2028\ud800") == "plain é 晶 \\u200b\\u2028\\ud800"


def test_columns_line_up_where_characters_are_wide():
    assert table_text(["a", "n"], [("晶体", 1), ("x", 22), ("é", None)]).splitlines() == [
        "a      n", "----  --", "晶体   1", "x     22", "é      -",
    ]  # fmt: skip


def test_it_starts_without_the_heavy_parts(folder: Path):
    for words in (["ask"], ["ask", "polymorphs", "--formula", "TiO2"], ["ask", "tables"], ["ask", "sources", "--json"],
                  ["survey", "--by", "elements"]):  # fmt: skip
        code = (
            f"import sys; sys.argv = ['lattice-census', *{words!r}]\n"
            "from lattice_census.flows.cli import main\n"
            "try: main()\nexcept SystemExit as e: assert not e.code, e.code\n"
            "heavy = ('prefect', 'numba', 'scipy', 'matplotlib', 'polars', 'pyarrow', 'rich', 'moyopy')\n"
            "print([m for m in heavy if m in sys.modules])"
        )
        done = subprocess.run([sys.executable, "-c", code], cwd=folder, capture_output=True, text=True, env=os.environ)
        assert done.stdout.endswith("[]\n"), (words, done.stdout, done.stderr)


def test_a_store_that_is_not_there_or_older_is_told(census: Callable[..., tuple[int, str, str]], tmp_path: Path):
    assert census("ask", "sources", "--store", str(tmp_path / "none.duckdb"))[0] == 3
    make_small_store(tmp_path / "old.duckdb")
    with duckdb.connect(str(tmp_path / "old.duckdb")) as old:
        old.execute("DELETE FROM schema_migrations WHERE version > 1")
    code, _, err = census("ask", "sources", "--store", str(tmp_path / "old.duckdb"))
    assert code == 3 and "older lattice-census" in err
    assert census("ask", "--sql", "SELECT 1", "--store", str(tmp_path / "old.duckdb"))[0] == 0
