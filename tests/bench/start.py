"""Start: seconds until commands that only read have answered, and until all kernels are compiled once."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from .collection import Kind, write_table
from .figures import Figure, Options, Report
from .night import ROOT, nights, run_night
from .timing import Seconds

COMMAND = "from lattice_census.flows.cli import main; main()"
HEAVY = ("prefect", "numba")
"""Libraries that a command that reads must not load."""

COMPILE = "from lattice_census.kernels import warm_up; print(warm_up())"


def run(options: Options) -> Report:
    """Median seconds of each command in a new process, and of one compilation in an empty folder."""
    count = options.count(2000)
    (night,) = nights(options.scratch, Kind(), count, options.workers, 1)
    store = ["--store", str(night.store)]
    commands = {
        "--help": ["--help"],
        "status": ["status", *store],
        "survey": ["survey", *store],
        "ask --sql": ["ask", *store, "--sql", "SELECT count(*) AS records FROM records"],
    }
    figures = []
    for name, words in commands.items():
        loaded = heavy(words)
        assert not loaded, f"`{name}` loads {', '.join(loaded)}"
        taken = []
        for _ in range(options.times(5)):
            begun = time.perf_counter()
            answer = _call([sys.executable, "-c", COMMAND, *words])
            taken.append(time.perf_counter() - begun)
            if name == "ask --sql":
                assert f"{count}" in answer.replace(",", ""), f"`ask` does not answer {count}: {answer!r}"
        figures.append(Seconds(tuple(taken)).figure(name, reach=0.5))
    seconds, left = compile_all(options)
    figures.append(Figure("compiling all kernels", seconds, "s", reach=30.0))
    figures.append(Figure("kernels that a night then compiles still", left, "", reach=0))
    return Report("start", {"store": f"{count} records"}, tuple(figures))


def heavy(words: list[str]) -> list[str]:
    """Which of HEAVY a command has loaded when it ends."""
    code = (
        "import atexit, sys\n"
        f"atexit.register(lambda: print([m for m in {HEAVY!r} if m in sys.modules], file=sys.stderr))\n{COMMAND}"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, *words], cwd=ROOT, capture_output=True, text=True, check=True
    )  # fmt: skip
    told = done.stderr.strip().splitlines()[-1]
    return [name for name in HEAVY if repr(name) in told]


def compile_all(options: Options) -> tuple[float, int]:
    """Seconds to compile every kernel into an empty folder, in a new process; and how many versions of kernels a small
    night compiles into it afterwards, for arguments of another kind."""
    with tempfile.TemporaryDirectory() as temporary:
        kernels = {"NUMBA_CACHE_DIR": str(Path(temporary) / "kernels")}
        told = _call([sys.executable, "-c", COMPILE], kernels)
        compiled = set(Path(temporary).rglob("*.nbc"))
        assert compiled, "nothing was compiled into the folder"
        path = write_table(Path(temporary) / "few.csv", Kind(), 0, 60)
        run_night(path, Path(temporary) / "few.duckdb", 1, environment=kernels)
        return float(told), len(set(Path(temporary).rglob("*.nbc")) - compiled)


def _call(words: list[str], environment: dict[str, str] | None = None) -> str:
    done = subprocess.run(
        words, cwd=ROOT, env={**os.environ, **(environment or {})}, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, f"{words[-1]} ended with exit code {done.returncode}: {done.stderr.strip()}"
    return done.stdout
