"""Start: seconds until commands that only read have answered, and until all kernels are compiled once."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from .collection import Kind
from .figures import Figure, Options, Report
from .night import ROOT, nights
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
    figures.append(Figure("compiling all kernels", compile_seconds(), "s", reach=30.0))
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


def compile_seconds() -> float:
    """Seconds to compile every kernel into an empty folder, in a new process."""
    with tempfile.TemporaryDirectory() as folder:
        told = _call([sys.executable, "-c", COMPILE], {"NUMBA_CACHE_DIR": folder})
        assert list(Path(folder).rglob("*.nbi")), "nothing was compiled into the folder"
    return float(told)


def _call(words: list[str], environment: dict[str, str] | None = None) -> str:
    done = subprocess.run(
        words, cwd=ROOT, env={**os.environ, **(environment or {})}, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, f"{words[-1]} ended with exit code {done.returncode}: {done.stderr.strip()}"
    return done.stdout
