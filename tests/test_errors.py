"""Every error as a person meets it: exit code, a message that says what, where and what to do, and nothing changed."""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
import resource
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import duckdb
import pytest

from .curated import copies, row
from .tables_of_structures import text_of, write_csv
from .test_curating_commands import RUN, census

MAIN = [sys.executable, "-c", "from lattice_census.flows.cli import main; main()"]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A store s.duckdb of four crystals in three copies, and everything that is wrong beside it."""
    folder = tmp_path_factory.mktemp("wrong")
    write_csv(folder / "t.csv", [row(f"{i}-{j}", c) for i, j, c in copies(4, 3)])
    assert census("run", "t.csv", *RUN, "--store", "s.duckdb", cwd=folder).returncode == 0
    (folder / "text.duckdb").write_text("this is no store\n")
    (folder / "empty.duckdb").write_text("")
    (folder / "cut.duckdb").write_bytes((folder / "s.duckdb").read_bytes()[:300_000])
    shutil.copy(folder / "s.duckdb", folder / "newer.duckdb")
    with duckdb.connect(str(folder / "newer.duckdb")) as connection:
        connection.execute("INSERT INTO schema_migrations SELECT 999, 'x', now()")
    with duckdb.connect(str(folder / "other.duckdb")) as connection:
        connection.execute("CREATE TABLE t (i INTEGER)")
    (folder / "bare").mkdir()
    assert census("ingest", "bare", *RUN, "--store", "bare.duckdb", cwd=folder).returncode == 0
    (folder / "grammar.toml").write_text("near_shift = \n")
    (folder / "latin.toml").write_bytes(b"theory_preference = ['\xe9']\n")
    (folder / "bad.toml").write_text(
        'near_shift = "wide"\nnear_shfit = 1\nkeep_rules = ["luck"]\n[sources.a]\nenergy_unit = "cal"\nlabel = 1\n'
    )
    (folder / "table.toml").write_text("sources = 3\n")
    (folder / "pins.toml").write_text('[[pin]]\nkind = "keep"\n')
    (folder / "other").mkdir()
    write_csv(folder / "other" / "t.csv", [row("x", copies(1, 1)[0][2])])
    return folder


def state(folder: Path) -> dict[str, str]:
    """Every file and folder with the digest of its content, the lock of the work folder left aside."""
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest() if path.is_file() else "/"
        for path in sorted(folder.rglob("*"))
        if path.name not in ("lock", "work.duckdb")
    }


NO_GROUPS = "The store holds no records yet. Read some with: lattice-census ingest PATH"
TABLE: tuple[tuple[str, int, str], ...] = (
    # words of the command
    ("nonsense", 2, "No such command 'nonsense'. `lattice-census --help` says"),
    ("status --nonsense", 2, "No such option: --nonsense. `lattice-census status --help` says"),
    ("ingest", 2, "Missing argument 'PATH'. `lattice-census ingest --help` says"),
    ("withdraw t.csv", 2, "Missing option '--reason'"),
    ("ingest t.csv --workers many", 2, "'--workers'"),
    ("check --sample -1", 2, "'--sample'"),
    ("ingest t.csv --wait -1", 2, "--wait -1: give seconds"),
    ("ingest t.csv --wait nan", 2, "--wait nan: give seconds"),
    ("run t.csv --fail-on known", 2, "choose from rejects, findings"),
    ("known t.csv --fail-on findings", 2, "choose from known, rejects"),
    # the store
    ("status --store none.duckdb", 3, "Make one with: lattice-census ingest PATH --store none.duckdb"),
    ("group --store none.duckdb --direct", 3, "There is no store at"),
    ("keep --store none.duckdb", 3, "There is no store at"),
    ("undo 1 --store none.duckdb", 3, "There is no store at"),
    ("pin list --store none.duckdb", 3, "There is no store at"),
    ("status --store bare", 3, "is a folder; --store names a file"),
    ("ingest t.csv --store . --direct", 3, "is a folder; --store names a file"),
    ("ingest t.csv --store none/s.duckdb --direct", 2, "there is no folder"),
    ("status --store text.duckdb", 3, "Give another --store"),
    ("ingest t.csv --store text.duckdb --direct", 3, "Give another --store"),
    ("status --store empty.duckdb", 3, "Give another --store"),
    ("survey --store cut.duckdb", 3, "put a sound copy in its place"),
    ("ingest t.csv --store cut.duckdb --direct", 3, "put a sound copy in its place"),
    ("status --store newer.duckdb", 3, "Update lattice-census"),
    ("ingest t.csv --store newer.duckdb --direct", 3, "Update lattice-census"),
    ("status --store other.duckdb", 3, "not a store of lattice-census"),
    ("ingest t.csv --store other.duckdb --direct", 3, "not a store of lattice-census"),
    # settings
    ("ingest t.csv --settings none.toml", 2, "none.toml cannot be read: No such file"),
    ("ingest t.csv --settings bare", 2, "bare cannot be read: Is a directory"),
    ("ingest t.csv --settings grammar.toml", 2, "grammar.toml is not TOML: Invalid value (at line 1"),
    ("ingest t.csv --settings latin.toml", 2, "latin.toml is not TOML"),
    ("ingest t.csv --settings bad.toml", 2, "near_shift (from bad.toml): Input should be a valid number"),
    ("ingest t.csv --settings bad.toml", 2, "near_shfit (from bad.toml): there is no such setting; did you"),
    ("ingest t.csv --settings bad.toml", 2, "sources.a.energy_unit (from bad.toml): Input should be 'eV'"),
    ("ingest t.csv --settings bad.toml", 2, "sources.a.label (from bad.toml): there is no such setting"),
    ("ingest t.csv --settings table.toml", 2, "sources (from table.toml):"),
    ("ingest t.csv --set near_shift", 2, "--set near_shift: give it as NAME=VALUE"),
    ("ingest t.csv --set near_shift=5", 2, "near_shift (from an option): Input should be less than or equal to 0.3"),
    ("ingest t.csv --workers -1", 2, "workers (from an option)"),
    ("ingest t.csv --set exact_tolerance=0.002 --direct", 2, "give --recompute, or leave the setting as it is"),
    ("group --set near_shift=0.04 --direct", 2, "give --recompute, or leave the setting as it is"),
    # what is read
    ("ingest none.cif --direct", 2, "There is no file or folder none.cif"),
    ("ingest t.csv other/t.csv --direct", 2, "--source NAME"),
    ("ingest other/t.csv --direct", 2, "give it another name with --source"),
    ("ingest t.csv bare --source x --direct", 2, "give one PATH"),
    ("ingest t.csv --source a:b --direct", 2, "cannot name a source"),
    ("ingest t.csv --energy-unit cal", 2, "--energy-unit cal: Input should be 'eV'"),
    ("ingest t.csv --energy-column e --direct", 2, "give --recompute"),
    ("run t.csv --export bare --direct", 2, "bare exists already: --export writes into a new folder"),
    ("known none.cif", 2, "There is no file or folder none.cif"),
    ("known t.csv --grade rescaled", 2, "choose from"),
    ("known t.csv --out bare", 2, "a new file that ends in .csv"),
    ("demo bare/..", 2, "Name another"),
    ("demo t.csv", 2, "Name another"),
    # records, runs, grades
    ("witness t.csv:0-0 t.csv:0-0", 2, "Give two records"),
    ("witness 0-0 t.csv:0-0", 2, "give a record id (20 hex digits) or SOURCE:LABEL"),
    ("witness t.csv:none t.csv:0-0", 2, "The source 't.csv' has no record 'none'"),
    ("witness none:a t.csv:0-0", 2, "The store has no source 'none'"),
    ("witness 00000000000000000000 t.csv:0-0", 2, "no record with the id"),
    ("witness t.csv:0-0 t.csv:0-1 --out bare", 2, "Give a new folder"),
    ("witness t.csv:0-0 t.csv:0-1 --out none/x", 2, "There is no folder none"),
    ("undo 999", 2, "nothing to undo for 999"),
    ("undo nobody", 2, "names no run, source or record. A record is given by its id (20 hex digits) or as SOURCE:LA"),
    ("undo nobody", 2, "BEL; sources: t.csv."),
    ("withdraw nobody --reason x", 2, "names no source or record"),
    ("withdraw t.csv --reason=", 2, "give --reason TEXT"),
    ("keep --grade best --direct", 2, "it has: copy, key, near, same"),
    ("keep --store bare.duckdb --direct", 2, NO_GROUPS),
    ("export new --store bare.duckdb", 2, NO_GROUPS),
    ("keep --again t.csv:0-0 --direct", 2, "was taken back"),
    ("pin keep t.csv:0-0 --reason=", 2, "give --reason TEXT"),
    ("pin apart t.csv:0-0 t.csv:0-0 --reason x", 2, "two different records"),
    ("pin remove 9", 2, "`pin list` shows"),
    ("pin import none.toml", 2, "none.toml cannot be read"),
    ("pin import grammar.toml", 2, "is not TOML"),
    ("pin import bad.toml", 2, "[[pin]] tables and nothing else"),
    ("pin import pins.toml", 2, "Pin 1 of pins.toml is not whole"),
    ("pin export t.csv", 2, "not written over"),
    ("pin export none/p.toml", 2, "cannot be written: No such file"),
    # questions
    ("ask nothing", 2, "`lattice-census ask` lists them"),
    ("ask lattice-typs", 2, "Did you mean: lattice-types"),
    ("ask polymorphs", 2, "polymorphs needs --formula"),
    ("ask polymorphs --formula 3x", 2, "--formula 3x: give"),
    ("ask lattice-types --colour red", 2, "has no parameter --colour"),
    ("ask lattice-types --source", 2, "--source has no value"),
    ("ask lattice-types extra", 2, "give parameters as --name value"),
    ("ask group-of --record x", 2, "20 hex digits"),
    ("ask lattice-types --sql SELECT", 2, "Give one of"),
    ("ask --sql DROP.TABLE.records", 2, "Only a SELECT"),
    ("ask --sql SELECT.1;SELECT.2", 2, "exactly one SELECT"),
    ("ask --sql FROM.nothing", 2, "Table with name nothing does not exist"),
    ("ask --sql FROM.'t.csv'", 2, "sees the store and nothing else"),
    ("ask lattice-types --out a.txt", 2, "end in .csv or .parquet"),
    ("ask lattice-types --out t.csv", 2, "not written over"),
    ("ask lattice-types --out none/a.csv", 2, "there is no folder"),
    ("ask lattice-types --seconds 0", 2, "--seconds 0: give"),
    ("ask lattice-types --memory lots", 2, "like 500MB"),
    ("ask --seconds 0.2 --sql SELECT.sum(i*j).FROM.range(9999999).a(i),range(9999999).b(j)", 4, "more with --seconds"),
    ("survey --by colour", 2, "choose from source"),
    ("survey --top 0", 2, "give at least 1"),
    ("overlap a", 2, "Give two names"),
    ("overlap a b", 2, "has the source 'a'"),
    ("overlap --by colour", 2, "choose from source, split"),
    ("overlap --store bare.duckdb", 2, "lattice-census group"),
    # what is written
    ("export bare", 2, "bare exists already"),
    ("export new --form pdf", 2, "choose from cif"),
    ("export new --grade best", 2, "no groups of grade"),
    ("export new --as-of 77", 2, "`ask runs` lists them"),
    ("export new --splits train", 2, "like train=0.8"),
    ("export new --splits a=0.5", 2, "add up to 0.5"),
    ("export new --where colour=1", 2, "is no condition on the columns"),
    ("report --out bare", 2, "Name a file with --out"),
    ("report --out t.csv", 2, "Name another file"),
    ("report --out none/r.html", 2, "There is no folder none"),
)  # fmt: skip


@pytest.mark.parametrize(("line", "code", "told"), TABLE)
def test_said_and_nothing_changed(folder: Path, line: str, code: int, told: str):
    """In a line, a point stands for a blank inside of a word of SQL."""
    words = [w.replace(".", " ") if "--sql" in line and w[0].isupper() else w for w in line.split()]
    words = [w.replace("t csv", "t.csv") for w in words]
    if "--store" not in words and words[0] not in ("nonsense", "demo") and words[:1] != ["status"]:
        words += ["--store", "s.duckdb"]
    before = state(folder)
    done = census(*words, cwd=folder)
    assert done.returncode == code, (words, done.stdout, done.stderr)
    assert told in done.stderr, done.stderr
    assert done.stderr.startswith(("lattice-census: ", "reading ...\nlattice-census: ")) and done.stdout == ""
    assert "Traceback" not in done.stderr and "failed with" not in done.stderr
    assert state(folder) == before


@pytest.mark.parametrize(
    ("variable", "told"),
    [
        ("LATTICE_CENSUS_NEAR_SHFT=1", "names no setting. Did you mean LATTICE_CENSUS_NEAR_SHIFT?"),
        ("LATTICE_CENSUS_QQQQ=1", "LATTICE_CENSUS_QQQQ names no setting. Unset it."),
        ("LATTICE_CENSUS_NEAR_SHIFT=x", "near_shift (from the environment)"),
        ("LATTICE_CENSUS_SETTINGS=none.toml", "none.toml cannot be read"),
    ],
)
def test_environment(folder: Path, monkeypatch: pytest.MonkeyPatch, variable: str, told: str):
    monkeypatch.setenv(*variable.split("="))
    done = census("ingest", "t.csv", "--store", "s.duckdb", "--direct", cwd=folder)
    assert done.returncode == 2 and told in done.stderr, done.stderr


def test_a_damaged_store_comes_back_from_its_work_folder(folder: Path):
    write_csv(folder / "u.csv", [row("u", copies(1, 1)[0][2])])
    assert census("ingest", "u.csv", *RUN, "--store", "u.duckdb", cwd=folder).returncode == 0
    (folder / "u.duckdb").write_text("overwritten")
    done = census("status", "--store", "u.duckdb", cwd=folder)
    assert done.returncode == 3 and "Move it away: the next `lattice-census ingest PATH` publishes" in done.stderr
    (folder / "u.duckdb").rename(folder / "damaged")
    assert census("ingest", "u.csv", *RUN, "--store", "u.duckdb", cwd=folder).returncode == 0
    done = census("status", "--json", "--store", "u.duckdb", cwd=folder)
    assert json.loads(done.stdout)["records"] == 1


def test_a_store_in_use(folder: Path):
    lock = folder / "s.duckdb.work" / "lock"
    with lock.open("r+") as held:
        fcntl.flock(held, fcntl.LOCK_EX)
        held.write(json.dumps({"pid": 4711, "command": "run"}))
        held.flush()
        begun = time.monotonic()
        for words in (("run", "t.csv", *RUN), ("keep",), ("undo", "1"), ("withdraw", "t.csv", "--reason", "x")):
            done = census(*words, "--store", "s.duckdb", "--wait", "0.3", cwd=folder)
            assert done.returncode == 3, done.stderr
            assert (
                "Another run is writing to this store (process 4711: run). Wait for it, or give --wait" in done.stderr
            )
        assert time.monotonic() - begun >= 4 * 0.3
        assert census("status", "--store", "s.duckdb", cwd=folder).returncode == 0
        held.truncate(0)


def _small_files() -> None:
    """No file of more than 600 kB, as on a disk that is full; the signal turned into an error as Python does."""
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (600_000, 600_000))


def test_a_full_disk(folder: Path):
    write_csv(folder / "full.csv", [row(f"{i}", c) for i, _, c in copies(4, 1)])
    words = ["ingest", "full.csv", *RUN, "--store", "full.duckdb"]
    done = subprocess.run([*MAIN, *words], cwd=folder, capture_output=True, text=True, preexec_fn=_small_files)
    assert done.returncode == 4 and "Make room. Nothing is half-written; the same command goes on" in done.stderr
    assert "Traceback" not in done.stderr and not (folder / "full.duckdb").exists()
    done = subprocess.run([*MAIN, *words], cwd=folder, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    told = census("status", "--json", "--store", "full.duckdb", cwd=folder)
    assert json.loads(told.stdout)["records"] == 4
    assert census("check", "--store", "full.duckdb", cwd=folder).returncode == 0

    before = state(folder)
    for words in (
        ["ask", "--sql", "FROM records a, records b, records c, range(100) d", "--out", "big.csv"],
        ["report", "--out", "big.html"],
    ):
        done = subprocess.run(
            [*MAIN, *words, "--store", "s.duckdb"], cwd=folder, capture_output=True, text=True,
            preexec_fn=_small_files if words[0] == "ask" else _tiny_files,
        )  # fmt: skip
        assert done.returncode == 4 and "Make room." in done.stderr, done.stderr
        assert state(folder) == before
    if not Path("/dev/full").exists():  # Linux has it
        return
    with Path("/dev/full").open("w") as full:
        words = ["survey", "--store", "s.duckdb"]
        done = subprocess.run([*MAIN, *words], cwd=folder, stderr=subprocess.PIPE, text=True, stdout=full)
    assert done.returncode == 4 and "Make room." in done.stderr and "Traceback" not in done.stderr


def _tiny_files() -> None:
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))


def test_nobody_reads_the_output(folder: Path):
    for words in (
        ["check", "--store", "s.duckdb"],
        ["ask"],
        ["ask", "--sql", "FROM range(9999)", "--store", "s.duckdb"],
    ):
        read, write = os.pipe()
        os.close(read)
        done = subprocess.run([*MAIN, *words], cwd=folder, stdout=write, stderr=subprocess.PIPE, text=True)
        os.close(write)
        assert (done.returncode, done.stderr) == (0, ""), words


def test_stopped_by_hand(tmp_path: Path):
    """Ctrl-C reaches every process of the terminal at once."""
    write_csv(tmp_path / "t.csv", [row(f"{i}-{j}", c) for i, j, c in copies(60, 4)])
    words = ["run", "t.csv", "--direct", "--workers", "2", "--set", "chunk_records=2"]
    process = subprocess.Popen(
        [*MAIN, *words], cwd=tmp_path, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True
    )
    assert process.stderr is not None
    while "reading" not in process.stderr.readline():
        assert process.poll() is None
    time.sleep(0.5)
    os.killpg(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 4, err
    assert err.endswith("lattice-census: stopped. Nothing is half-written; the same command goes on where it was.\n")
    assert "Traceback" not in err and out == ""
    done = subprocess.run([*MAIN, *words], cwd=tmp_path, capture_output=True, text=True)
    assert done.returncode == 0 and "240 accepted" in done.stdout, done.stderr


@pytest.mark.skipif(os.getuid() == 0, reason="the superuser may write anywhere; the next test asks another user")
def test_folders_that_cannot_be_written(folder: Path):
    _in_read_only_folder(folder, [])


@pytest.mark.skipif(os.getuid() != 0 or shutil.which("setpriv") is None, reason="needs the right to be somebody else")
def test_folders_that_cannot_be_written_by_another_user(folder: Path, tmp_path: Path):
    _in_read_only_folder(folder, ["setpriv", "--reuid=65534", "--regid=65534", "--clear-groups"])


def _in_read_only_folder(folder: Path, before: list[str]) -> None:
    place = Path("/tmp") if before else folder
    shut = place / f"shut-{os.getpid()}"
    shut.mkdir()
    try:
        shutil.copy(folder / "s.duckdb", shut)
        (shut / "good.cif").write_text(text_of(copies(1, 1)[0][2]))
        shut.chmod(0o555)
        environment = {**os.environ, "HOME": "/nonexistent", "TMPDIR": "/tmp"}
        for words, code, told in (
            (
                ["ingest", "good.cif", "--store", "s.duckdb", "--direct"],
                3,
                "s.duckdb.work cannot be written: Permission",
            ),
            (["export", "out", "--store", "s.duckdb"], 4, "cannot be"),
            (["report", "--store", "s.duckdb"], 4, "cannot be"),
            (["ask", "runs", "--out", "a.csv", "--store", "s.duckdb"], 4, "cannot be"),
            (["status", "--store", "s.duckdb"], 0, ""),
        ):
            done = subprocess.run([*before, *MAIN, *words], cwd=shut, capture_output=True, text=True, env=environment)
            assert done.returncode == code and told in done.stderr, (words, done.stderr)
            assert "Traceback" not in done.stderr
        assert sorted(p.name for p in shut.iterdir()) == ["good.cif", "s.duckdb"]
    finally:
        shut.chmod(0o755)
        shutil.rmtree(shut)
