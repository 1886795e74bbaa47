"""Where compiled kernels are kept: a folder that can be written, of its own for each state of the sources."""

from __future__ import annotations

import gc
import os
import shutil
import subprocess
import sys
import time
from pathlib import Path

import pytest

import lattice_census
from lattice_census.kernels import MODULES, SHARES, cache, sharing

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


def test_shares_of_two_processes_have_no_kernel_in_common():
    """Each function is compiled by one process and called in the other's share by none: one writer a file."""
    assert len(set(MODULES)) == len(MODULES)
    first, second = (
        {p.name for name in share for p in cache.sources(PIPELINE / "kernels" / f"{name}.py")} for share in SHARES
    )
    kernels = {p.name for p in (PIPELINE / "kernels").glob("*.py") if "\n@kernel\n" in p.read_text("utf-8")}
    assert not first & second & kernels


def test_another_process_compiles_its_share_into_the_same_folder(tmp_path):
    code = (
        "from lattice_census.kernels.sharing import kept, second_process\n"
        "names = ('rows_filter',)\n"
        "assert not kept(names)\n"
        "with second_process(names) as shared:\n"
        "    shared()\n"
        "assert kept(names)\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True, env={**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)})


def test_the_other_process_ends_when_the_first_is_killed(tmp_path):
    code = (
        "import os, signal\n"
        "from lattice_census.kernels.sharing import _begin\n"
        "print(_begin(('match',)).pid, flush=True)\n"
        "os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    killed = subprocess.run(
        [sys.executable, "-c", code], env={**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)}, capture_output=True
    )
    other = int(killed.stdout)
    for _ in range(600):
        try:
            os.kill(other, 0)
        except ProcessLookupError:
            break
        if _gone(other):
            break
        time.sleep(0.1)
    else:
        pytest.fail("still compiling for a process that is gone")


def _gone(pid: int) -> bool:
    """Whether the process has ended and nobody has asked for its outcome yet (no init process that does)."""
    state = subprocess.run(["ps", "-o", "stat=", "-p", str(pid)], capture_output=True, text=True).stdout
    return state.strip().startswith("Z") or not state.strip()


def test_rubbish_is_collected_again_after_compiling():
    assert gc.isenabled()
    with pytest.raises(KeyError), sharing.without_collecting():
        assert not gc.isenabled()
        raise KeyError
    assert gc.isenabled()


def test_without_another_process_everything_goes_on_here(monkeypatch):
    monkeypatch.setattr(sharing, "kept", lambda names: False)
    monkeypatch.setattr(sharing, "cores", lambda: 2)
    monkeypatch.setattr(sys, "executable", "/nowhere/python")
    with sharing.second_process(("rows_filter",)) as shared:
        shared()


WORK = """
from importlib import import_module
import numpy as np
from lattice_census.cell.canonical import canonicalise
from lattice_census.cell.crystal_type import classify_crystals
from lattice_census.cell.lattice_type import classify_lattices
from lattice_census.fingerprint.distributions import fingerprint
from lattice_census.grouping.composition import group_composition
from lattice_census.kernels import MODULES, warm_up
from lattice_census.model.batch import select
from lattice_census.tolerances import Tolerances
from tests import strategies

def kernels():
    modules = [import_module("lattice_census.kernels." + name) for name in MODULES]
    found = {k: v for m in modules for k, v in vars(m).items() if hasattr(v, "signatures")}
    return {k: len(v.signatures) for k, v in found.items() if not v.targetoptions.get("no_cpython_wrapper")}

warm_up()
before = kernels()
rng, tolerances = np.random.default_rng(5), Tolerances()
kinds = strategies.random_crystal(rng, "oI", 4, ("Al", "O")), strategies.random_crystal(rng, "cP", 4, ("Al", "O"))
given = [strategies.disguise(rng, c, max_index=2, noise=0.005) for c in kinds for _ in range(3)]
found = canonicalise(strategies.batch(given), tolerances)
crystals = found.crystals
for batch in (crystals, select(crystals, np.arange(2))):
    classify_crystals(batch, classify_lattices(batch.cells, tolerances, batch.periodicity), tolerances)
    fingerprint(batch)
ids = [f"{i:020x}" for i in range(len(crystals))]
grouping = group_composition(crystals, found.crystal_key, ids, range(len(crystals)), tolerances)
assert len(set(grouping.members["near"].family_id)) == 2
assert max(before.values()) == 1 and kernels() == before, (before, kernels())
"""


def test_warming_up_compiles_what_the_work_then_calls():
    """Read-only arrays and others are different kernels to numba: those that batches have are compiled beforehand."""
    done = subprocess.run([sys.executable, "-c", WORK], cwd=Path(__file__).parents[1], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
