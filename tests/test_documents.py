"""README and DEVELOPERS say what the code says."""

from __future__ import annotations

import re
import subprocess

import pytest

from .documents import FILES, PARTS, ROOT, filled


@pytest.mark.parametrize("name", FILES)
def test_the_generated_parts_are_up_to_date(name: str):
    text = (ROOT / name).read_text(encoding="utf-8")
    assert filled(text) == text, "run: python -m tests.documents"


def test_every_part_stands_somewhere():
    text = "".join((ROOT / name).read_text(encoding="utf-8") for name in FILES)
    for part in PARTS:
        assert f"<!-- {part} -->" in text


def test_the_repository_speaks_of_the_project_alone():
    """No path of a machine and no mark of unfinished work in a file that git knows."""
    names = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True).stdout.split("\n")
    unwanted = re.compile("|".join(("TO" + "DO", "FIX" + "ME", "X" * 3 + r"\b", "/ro" + "ot/", "/ho" + "me/")))
    for name in filter(None, names):
        path = ROOT / name
        if path.is_file() and path.suffix in (".py", ".md", ".sql", ".toml"):
            found = unwanted.search(path.read_text(encoding="utf-8"))
            assert not found, (name, found)
