"""The commands as a person types them: output, exit codes, messages."""

from __future__ import annotations

import json
import resource
import subprocess
import sys
from pathlib import Path

import pytest

from lattice_census import __version__

from .tables_of_structures import crystals, rows_of, text_of, write_csv


def census(*arguments: str, cwd: Path, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run the command in a folder."""
    import os

    return subprocess.run(
        [sys.executable, "-c", "from lattice_census.flows.cli import main; main()", *arguments],
        cwd=cwd, capture_output=True, text=True, env={**os.environ, **environment},
    )  # fmt: skip


READING = ("status", "export")


def test_help_and_version_start_without_the_heavy_parts(tmp_path: Path):
    code = (
        "import sys; sys.argv = ['lattice-census', '--help']\n"
        "from lattice_census.flows.cli import main\n"
        "try: main()\nexcept SystemExit: pass\n"
        "print([m for m in ('prefect', 'numba', 'scipy', 'matplotlib', 'polars', 'duckdb') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.endswith("[]\n")
    assert census("--version", cwd=tmp_path).stdout == f"lattice-census {__version__}\n"


def test_commands_that_read_import_neither_prefect_nor_numba(tmp_path: Path):
    write_csv(tmp_path / "t.csv", rows_of(crystals(3)))
    assert census("ingest", "t.csv", "--direct", "--workers", "1", cwd=tmp_path).returncode == 0
    for arguments in (["status"], ["survey"], ["ask"], ["ask", "lattice-types"], ["ask", "--sql", "FROM runs"],
                      ["ask", "tables"], ["pin", "list"], ["export", "out"],
                      ["export", "out2", "--form", "csv"]):  # fmt: skip
        code = (
            f"import sys; sys.argv = ['lattice-census', *{arguments!r}]\n"
            "from lattice_census.flows.cli import main\n"
            "try: main()\nexcept SystemExit as e: assert not e.code, e.code\n"
            "heavy = {'prefect', 'numba', 'scipy', 'matplotlib', 'gemmi', 'moyopy', 'dask', 'networkx'}\n"
            "heavy |= set() if sys.argv[1] == 'export' else {'numpy', 'polars', 'pyarrow', 'rich'}\n"
            "print(sorted(heavy & set(sys.modules)))"
        )
        done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True)
        assert done.stdout.endswith("[]\n"), (arguments, done.stdout, done.stderr)


def test_every_command_answers_help_and_has_one():
    from typer.main import get_command

    from lattice_census.flows.cli import app

    commands = get_command(app).commands  # type: ignore[attr-defined]
    for name, command in commands.items():
        assert command.help, name
        for parameter in command.params:
            assert parameter.help, (name, parameter.name)


def test_every_command_stands_in_the_readme():
    from typer.main import get_command

    from lattice_census.flows.cli import app

    text = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")
    for name in get_command(app).commands:  # type: ignore[attr-defined]
        assert f"| `{name}" in text, name


def test_ingest_status_export(tmp_path: Path):
    listed = crystals(6)
    write_csv(tmp_path / "a.csv", rows_of([*listed, *listed[:2]]))
    (tmp_path / "odd.cif").write_text("data_odd\n_cell_length_a 3\n")
    done = census("ingest", "a.csv", "odd.cif", "--direct", "--workers", "1", "--json", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    counts = json.loads(done.stdout)
    assert (counts["found"], counts["accepted"], counts["rejected"]) == (9, 8, 1)
    facts = json.loads(census("status", "--json", cwd=tmp_path).stdout)
    assert facts["records"] == 8 and facts["groups"][1] == {"grade": "key", "groups": 6, "set_aside": 2, "largest": 2}
    done = census("export", "clean", cwd=tmp_path)
    assert "6 kept, 2 set aside" in done.stdout
    assert len(list((tmp_path / "clean" / "structures").iterdir())) == 6
    assert (tmp_path / "clean" / "set_aside.csv").read_text().count("copy") == 2
    again = census("export", "clean", cwd=tmp_path)
    assert again.returncode == 2 and "exists already" in again.stderr


def test_exit_codes(tmp_path: Path):
    (tmp_path / "odd.cif").write_text("data_odd\n_cell_length_a 3\n")
    (tmp_path / "good.cif").write_text(text_of(crystals(1)[0]))
    run = ("--direct", "--workers", "1", "--quiet")
    assert census("ingest", "odd.cif", *run, cwd=tmp_path).returncode == 0
    assert census("ingest", "odd.cif", *run, "--recompute", "--fail-on", "rejects", cwd=tmp_path).returncode == 1
    assert census("ingest", "good.cif", *run, "--fail-on", "rejects", cwd=tmp_path).returncode == 0
    for arguments, told in {
        ("ingest", "none.cif", *run): "There is no file or folder none.cif",
        ("ingest", "good.cif", *run, "--fail-on", "everything"): "choose from rejects",
        ("ingest", "good.cif", *run, "--set", "near_shift"): "NAME=VALUE",
        ("ingest", "good.cif", *run, "--set", "nearshift=1"): "no such setting",
        ("ingest", "good.cif", *run, "--settings", "none.toml"): "none.toml cannot be read",
        ("ingest", "good.cif", *run, "--energy-unit", "cal"): "--energy-unit cal",
        ("ingest", "good.cif", "odd.cif", *run, "--source", "x"): "give one PATH",
        ("export", "x", "--form", "pdf"): "choose from cif",
        ("export", "x", "--grade", "best"): "no groups of grade",
        ("nonsense",): "No such command",
    }.items():
        done = census(*arguments, cwd=tmp_path)
        assert done.returncode == 2, (arguments, done.stderr)
        assert told in done.stderr, (arguments, done.stderr)
        assert "Traceback" not in done.stderr
    done = census("status", "--store", "none.duckdb", cwd=tmp_path)
    assert done.returncode == 3 and "There is no store" in done.stderr


@pytest.mark.slow
def test_the_same_store_with_prefect_and_without(tmp_path: Path):
    from .tables_of_structures import whole_store

    write_csv(tmp_path / "a.csv", rows_of(crystals(30)))
    home = {"PREFECT_HOME": str(tmp_path / "prefect")}
    for store, extra in {"flow.duckdb": [], "direct.duckdb": ["--direct"]}.items():
        done = census(
            "ingest", "a.csv", "--store", store, "--workers", "2", "--set", "chunk_records=10", *extra,
            cwd=tmp_path, **home,
        )  # fmt: skip
        assert done.returncode == 0, done.stderr
        assert "30 accepted" in done.stdout
    flow, direct = whole_store(tmp_path / "flow.duckdb"), whole_store(tmp_path / "direct.duckdb")
    flow.pop("runs"), direct.pop("runs")
    assert flow == direct


def test_reading_starts_fast(tmp_path: Path):
    """Time of the processor, not of the clock: a machine may be busy. Half a second is what a quiet one needs."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    for arguments in (("--help",), ("status",), ("ask",)):
        census(*arguments, cwd=tmp_path)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    assert after.ru_utime - before.ru_utime < 3 * 1.5
