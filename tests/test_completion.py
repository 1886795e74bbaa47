"""What the shell is told to complete."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import duckdb
import pytest

MAIN = [sys.executable, "-c", "from lattice_census.flows.cli import main; main()"]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A store with three sources, as far as completion looks at it, and a file that is none."""
    folder = tmp_path_factory.mktemp("complete")
    with duckdb.connect(str(folder / "census.duckdb")) as connection:
        connection.execute("CREATE TABLE sources AS SELECT unnest(['fine.parquet', 'field-cards', 'press']) AS source")
    (folder / "text.duckdb").write_text("no store")
    return folder


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ("sur", ["survey"]),
        ("survey --by s", ["source", "split"]),
        ("ask centr", ["centrings"]),
        ("keep --grade s", ["same"]),
        ("export x --form ex", ["extxyz"]),
        ("schedule t.csv --print ", ["crontab", "systemd"]),
        ("overlap f", ["field-cards", "fine.parquet"]),
        ("withdraw pr", ["press"]),
        ("withdraw --store none.duckdb pr", []),
        ("withdraw --store text.duckdb pr", []),
    ],
)
def test_completed(folder: Path, line: str, told: list[str]):
    words = f"lattice-census {line}"
    environment = {**os.environ, "_LATTICE_CENSUS_COMPLETE": "complete_bash", "COMP_WORDS": words,
                   "COMP_CWORD": str(len(words.split(" ")) - 1)}  # fmt: skip
    environment.pop("LATTICE_CENSUS_STORE", None)
    code = "import sys; sys.argv = ['lattice-census']; " + MAIN[2]
    done = subprocess.run([sys.executable, "-c", code], cwd=folder, capture_output=True, text=True, env=environment)
    assert done.stdout.split() == told and done.stderr == "", (done.stdout, done.stderr)


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_installed(tmp_path: Path, shell: str):
    environment = {**os.environ, "HOME": str(tmp_path), "SHELL": f"/bin/{shell}",
                   "_TYPER_COMPLETE_TEST_DISABLE_SHELL_DETECTION": "1"}  # fmt: skip
    code = f"import sys; sys.argv = ['lattice-census', '--show-completion', '{shell}']; " + MAIN[2]
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=environment)
    assert done.returncode == 0 and "_LATTICE_CENSUS_COMPLETE" in done.stdout, done.stderr
    code = code.replace("--show", "--install")
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=environment)
    assert done.returncode == 0 and any(tmp_path.rglob("*lattice*census*")), done.stderr
