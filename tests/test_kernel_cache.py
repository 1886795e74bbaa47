"""Where compiled kernels are kept: a folder that can be written, of its own for each state of the sources."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import lattice_census
from lattice_census.kernels import MODULES, cache

PIPELINE = Path(lattice_census.__file__).parent


def test_sources_of_a_kernel_are_all_that_it_imports():
    found = {p.relative_to(PIPELINE).as_posix() for p in cache.sources(PIPELINE / "kernels" / "canonical.py")}
    assert {
        "tolerances.py",
        "kernels/canonical.py",
        "kernels/bases.py",
        "kernels/vectors.py",
        "kernels/groups.py",
    } <= found
    assert not any(name.startswith(("store/", "cell/", "grouping/")) for name in found)


def test_digest_follows_every_source_and_nothing_else(tmp_path, monkeypatch):
    copy = tmp_path / "package"
    shutil.copytree(PIPELINE, copy, ignore=shutil.ignore_patterns("__pycache__"))
    monkeypatch.setattr(cache, "PACKAGE", copy)
    module = copy / "kernels" / "translations.py"
    before = cache.digest(module)
    for other in ("kernels/vectors.py", "kernels/translations.py"):
        with (copy / other).open("a", encoding="utf-8") as f:
            f.write("# changed\n")
        after = cache.digest(module)
        assert after != before, other
        before = after
    (copy / "kernels" / "ordering.py").write_text("", encoding="utf-8")
    assert cache.digest(module) == before


def test_first_folder_that_can_be_written_is_taken(tmp_path, monkeypatch):
    blocked = tmp_path / "file"
    blocked.write_text("")
    monkeypatch.setattr(cache, "candidates", lambda: [blocked / "inside", tmp_path / "second", tmp_path / "third"])
    cache.root.cache_clear()
    try:
        assert cache.root() == tmp_path / "second"
        assert (tmp_path / "second").stat().st_mode & 0o077 == 0
        monkeypatch.setattr(cache, "candidates", lambda: [blocked / "inside"])
        cache.root.cache_clear()
        with pytest.raises(OSError, match="NUMBA_CACHE_DIR"):
            cache.root()
    finally:
        cache.root.cache_clear()


def test_a_folder_of_somebody_else_is_not_read(tmp_path, monkeypatch):
    monkeypatch.setattr(os, "getuid", lambda: tmp_path.stat().st_uid + 1)
    assert not cache.writable(tmp_path)


def test_compiled_code_lands_in_the_folder(tmp_path):
    """A small kernel, in a fresh process with a folder of its own."""
    code = (
        "import numpy as np\n"
        "from lattice_census.kernels.niggli import reduce_cells\n"
        "reduce_cells(np.eye(3)[None], 1e-5)\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True, env={**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)})
    (folder,) = tmp_path.iterdir()
    assert folder.name == f"niggli-{cache.digest(PIPELINE / 'kernels' / 'niggli.py')}"
    assert list(folder.rglob("*.nbi"))


def test_every_module_that_can_be_warmed_up_is_named():
    able = {p.stem for p in (PIPELINE / "kernels").glob("*.py") if "\ndef warm_up() -> None:" in p.read_text("utf-8")}
    assert able == set(MODULES)
