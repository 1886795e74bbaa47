"""The examples of README are what the commands print: every `text` block is run, in order, where it says."""

from __future__ import annotations

import re
import shlex
import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest

from .documents import ROOT
from .test_curating_commands import census

README = (ROOT / "README.md").read_text(encoding="utf-8")
QUICK = {"demo": ["--direct", "--quiet"], "run": ["--direct", "--quiet", "--workers", "1"],
         "known": ["--quiet", "--workers", "1"]}  # fmt: skip
CUT = re.compile(re.escape(re.escape("...")))


def section(title: str) -> str:
    """The part of README under a heading of the second level."""
    (found,) = re.findall(rf"^## {re.escape(title)}\n(.*?)(?=^## |\Z)", README, re.MULTILINE | re.DOTALL)
    return str(found)


def examples(text: str) -> Iterator[tuple[list[str], list[str]]]:
    """(words behind `lattice-census`, lines that are shown) of every command of the text blocks."""
    for block in re.findall(r"^```text\n(.*?)^```$", text, re.MULTILINE | re.DOTALL):
        for example in re.split(r"^\$ lattice-census ", block, flags=re.MULTILINE)[1:]:
            lines = example.split("\n")
            taken = next(n for n in range(1, len(lines) + 1) if _whole("\n".join(lines[:n])))
            words = shlex.split("\n".join(lines[:taken]).replace("\\\n", " "))
            yield words, [line for line in lines[taken:] if line.strip()]


def _whole(command: str) -> bool:
    try:
        shlex.split(command)
    except ValueError:
        return False
    return not command.endswith("\\")


def put(title: str, folder: Path) -> int:
    """Run the examples of a section in a folder and compare; the number of commands."""
    count = 0
    for words, shown in examples(section(title)):
        whole = [match for word in words for match in _globbed(word, folder)]
        done = census(*whole, *QUICK.get(words[0], []), cwd=folder)
        assert done.returncode == 0, (words, done.stderr)
        printed = iter(done.stdout.splitlines())
        for line in shown:
            if line.strip() == "...":
                continue
            pattern = re.compile(CUT.sub(".*", re.escape(line.rstrip())) + "(?:  .*)?")  # further columns may be cut
            assert any(pattern.fullmatch(there.rstrip()) for there in printed), (words, line, done.stdout)
        count += 1
    return count


def _globbed(word: str, folder: Path) -> list[str]:
    found = folder.glob(word) if "*" in word and " " not in word else ()
    return sorted(path.relative_to(folder).as_posix() for path in found) or [word]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Where the session was held: with the demo in it."""
    folder = tmp_path_factory.mktemp("readme")
    assert put("A session", folder) == 3
    return folder


def test_questions(folder: Path):
    assert put("Questions", folder / "lattice-census-demo") == 5


def test_a_week(folder: Path):
    week = folder / "week"
    week.mkdir()
    shutil.copytree(folder / "lattice-census-demo" / "collection", week / "collection")
    shutil.copy(folder / "lattice-census-demo" / "demo.toml", week)
    assert put("A week with the tool", week) >= 10


def test_options_that_readme_names_are_there():
    from typer.main import get_command

    from lattice_census.flows.cli import app
    from lattice_census.output.questions import questions

    def options(command: object) -> Iterator[str]:
        for inner in getattr(command, "commands", {}).values():
            yield from options(inner)
        for parameter in command.params:  # type: ignore[attr-defined]
            yield from parameter.opts

    known = {*options(get_command(app)), "--help"}
    others = {"--dist", "--host", "--no-dashboard", "--nthreads", "--records"}  # of pytest, Dask and the benchmarks
    parameters = {"--parameter", *(p.option for q in questions().values() for p in q.parameters)}
    named = set(re.findall(r"(?<![\w-])--[a-z][a-z-]+", README))
    assert named - known - others - parameters == set()
