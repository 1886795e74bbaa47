"""The commands of a curator as a person types them."""

from __future__ import annotations

import contextlib
import io
import json
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path
from unittest import mock

import pytest

from lattice_census.flows import cli

from .curated import copies, row
from .tables_of_structures import write_csv

RUN = ("--direct", "--workers", "1", "--quiet")


@dataclass
class Done:
    """What a command left."""

    returncode: int
    stdout: str
    stderr: str


def census(*arguments: str, cwd: Path) -> Done:
    """Run the command in a folder, in this process: starting one for each takes most of the time."""
    out, err = io.StringIO(), io.StringIO()
    with (
        contextlib.chdir(cwd),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
        mock.patch.object(sys, "argv", ["lattice-census", *arguments]),
    ):
        code = cli._run()
    return Done(code, out.getvalue(), err.getvalue())


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A night has run over four crystals in three copies each; copies 0 and 1 are train, 2 is test."""
    folder = tmp_path_factory.mktemp("week")
    rows = [row(f"{i}-{j}", c, split="test" if j == 2 else "train") for i, j, c in copies(4, 3)]
    write_csv(folder / "t.csv", rows)
    write_csv(folder / "new.csv", [row(f"n{i}-{j}", c) for i, j, c in copies(5, 2) if j == 1])
    done = census("ingest", "t.csv", *RUN, "--split-column", "split", cwd=folder)
    assert done.returncode == 0, done.stderr
    done = census("run", "t.csv", *RUN, "--json", "--fail-on", "findings", cwd=folder)
    assert done.returncode == 1, done.stderr
    assert json.loads(done.stdout)["keep"]["set_aside"] == 8
    return folder


def test_keep_and_undo(folder: Path):
    done = census("keep", "--direct", cwd=folder)
    assert done.returncode == 0 and "Nothing new to decide at grade near; 8 records are set aside" in done.stdout
    done = census("keep", "--grade", "key", "--dry-run", cwd=folder)
    assert "set aside  t.csv:" in done.stdout and "It would be: 4 records set aside at grade key" in done.stdout
    record = json.loads(census("ask", "decisions", "--json", cwd=folder).stdout)["rows"][0]["record"]
    done = census("undo", record, cwd=folder)
    assert "1 decision taken back; `keep --again RECORD`" in done.stdout
    assert "1 is held" in census("keep", "--direct", cwd=folder).stdout
    status = census("status", cwd=folder).stdout
    assert "decided at grade near: 7 records set aside" in status and "held: undone 1" in status
    assert "findings: leak 4" in status
    done = census("keep", "--again", record, "--note", "after all", "--json", "--direct", cwd=folder)
    assert json.loads(done.stdout)["set_aside"] == 1
    assert census("keep", "--again", record, "--direct", cwd=folder).returncode == 2
    assert census("keep", "--grade", "best", "--direct", cwd=folder).returncode == 2


def test_pins(folder: Path):
    done = census("pin", "apart", "t.csv:3-0", "t.csv:3-1", "--reason", "spins", "--json", cwd=folder)
    number = str(json.loads(done.stdout)["pin"])
    assert "spins" in census("pin", "list", cwd=folder).stdout
    assert census("pin", "export", "pins.toml", cwd=folder).returncode == 0
    assert census("pin", "export", "pins.toml", cwd=folder).returncode == 2
    assert f"pin {number} removed" in census("pin", "remove", number, cwd=folder).stdout
    assert "(no pins)" in census("pin", "list", cwd=folder).stdout
    assert "pins set: 1, held already: 0" in census("pin", "import", "pins.toml", cwd=folder).stdout
    done = census("pin", "together", "t.csv:0-0", "t.csv:1-0", "--reason", "hope", cwd=folder)
    assert done.returncode == 0 and "takes no part" in done.stderr
    for _ in range(2):
        last = json.loads(census("pin", "list", "--json", cwd=folder).stdout)[-1]["pin"]
        census("pin", "remove", str(last), cwd=folder)
    assert census("pin", "keep", "t.csv:0-0", "--reason", " ", cwd=folder).returncode == 2


def test_known_and_overlap(folder: Path):
    done = census("known", "new.csv", "--quiet", "--workers", "1", "--fail-on", "known", cwd=folder)
    assert done.returncode == 1, done.stderr
    assert "5 structures at grade near: 4 known, 1 new, 0 refused." in done.stdout
    done = census("known", "new.csv", "--out", "told.csv", "--quiet", "--workers", "1", cwd=folder)
    assert done.returncode == 0 and len((folder / "told.csv").read_text().splitlines()) == 6
    assert census("known", "new.csv", "--out", "told.csv", cwd=folder).returncode == 2
    assert census("known", "new.csv", "--grade", "rescaled", cwd=folder).returncode == 2
    done = census("overlap", "train", "test", "--by", "split", "--fail-on", "overlap", cwd=folder)
    assert done.returncode == 1 and "records of train" in done.stdout
    done = census("overlap", "--by", "split", "--json", cwd=folder)
    assert json.loads(done.stdout)["rows"][0]["of_first"] == 4
    for arguments in (("overlap", "train"), ("overlap", "a", "b"), ("overlap", "--by", "x"), ("overlap", "a", "a")):
        assert census(*arguments, cwd=folder).returncode == 2


def test_export_says_what_it_did(folder: Path):
    done = census("export", "clean", "--form", "csv", "--splits", "train=0.5,test=0.5", cwd=folder)
    assert done.returncode == 0 and "set aside at grade near" in done.stdout and "train " in done.stdout
    done = census("export", "some", "--where", "sites_given > 1000", "--json", cwd=folder)
    assert json.loads(done.stdout)["kept"] == 0 and json.loads(done.stdout)["left_out"] == 12
    for where in ("1=1) OR (1=1", "a; DROP TABLE records", "no_such_column = 1", "", "label", "1=1, 2=2",
                  "(SELECT count(*) FROM read_text('t.csv')) > 0"):  # fmt: skip
        done = census("export", "none", "--where", where, cwd=folder)
        assert done.returncode == 2 and "Traceback" not in done.stderr, (where, done.stderr)
        assert not (folder / "none").exists()
    assert census("export", "none", "--splits", "a=0.5", cwd=folder).returncode == 2
    assert census("export", "none", "--as-of", "1", "--splits", "a=1", cwd=folder).returncode == 2


def test_commands_that_read_need_neither_prefect_nor_numba(folder: Path):
    for arguments in (["overlap"], ["pin", "list"], ["ask", "findings"], ["export", "light", "--form", "csv"]):
        code = (
            f"import sys; sys.argv = ['lattice-census', *{arguments!r}]\n"
            "from lattice_census.flows.cli import main\n"
            "try: main()\nexcept SystemExit as e: assert not e.code, e.code\n"
            "print([m for m in ('prefect', 'numba', 'scipy', 'matplotlib') if m in sys.modules])"
        )
        done = subprocess.run([sys.executable, "-c", code], cwd=folder, capture_output=True, text=True)
        assert done.stdout.endswith("[]\n"), (arguments, done.stdout[-500:], done.stderr)
