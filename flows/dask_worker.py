"""What runs on a Dask worker: telling what is installed there and what it sees, and doing jobs."""

from __future__ import annotations

import fcntl
import hashlib
import pickle
import platform
import socket
import threading
import time
import uuid
from contextlib import suppress
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any
from urllib.error import URLError
from urllib.request import urlopen

import lattice_census
from lattice_census.errors import CensusError, WorkError
from lattice_census.store.parts import Part

DECISIVE = ("numpy", "scipy", "numba", "polars", "pyarrow", "networkx", "gemmi", "moyopy", "extxyz", "pydantic")
"""Libraries whose version may change a result or how parts are read."""

CARRYING = ("dask", "distributed", "cloudpickle", "prefect")
"""Libraries that both ends of a connection must have alike."""

_warming = threading.Lock()


@cache
def installed() -> dict[str, str]:
    """Names and versions of all that has to be equal on every machine, with the digest of our own sources."""
    told = {"lattice-census": lattice_census.__version__, "sources": _sources(), "Python": platform.python_version()}
    for name in DECISIVE + CARRYING:
        try:
            told[name] = version(name)
        except PackageNotFoundError:
            told[name] = "none"
    return told


def _sources() -> str:
    """16 hex digits of all Python files of the package but for the commands and flows."""
    root = Path(lattice_census.__file__).parent
    total = hashlib.sha256()
    for path in sorted(root.rglob("*.py")):
        inside = path.relative_to(root)
        if inside.parts[0] not in ("flows", "sql"):
            total.update(inside.as_posix().encode() + b"\0" + hashlib.sha256(path.read_bytes()).digest())
    return total.hexdigest()[:16]


def differences(there: dict[str, str], here: dict[str, str]) -> list[str]:
    """What is installed otherwise there, a line each."""
    names = [name for name in here if there.get(name) != here[name]]
    return [f"{name} {there.get(name, 'none')} there and {here[name]} here" for name in names]


def look_around(place: str, mark: str, server: str | None) -> dict[str, Any]:
    """What a worker has and sees: versions; whether it finds the part `mark` in the place and can write another beside
    it, whose name it gives; whether it reaches the Prefect server, where one is named."""
    told: dict[str, Any] = {"installed": installed(), "host": socket.gethostname(), "place": None, "server": None}
    answer = Part(place, f"{mark}-{uuid.uuid4().hex[:12]}")
    try:
        answer.put(Part(place, mark).data())
        told["answer"] = answer.name
    except FileNotFoundError:
        told["place"] = "it is not there, or is another folder of the same name"
    except (OSError, CensusError) as error:
        told["place"] = str(error)
    if server is not None:
        try:
            urlopen(f"{server.rstrip('/')}/health", timeout=10).close()
        except (URLError, OSError) as error:
            told["server"] = str(error)
    return told


def do_job(expected: dict[str, str], packed: bytes) -> Any:
    """Do a job, given as (function, job) in pickled form: a few names and settings.

    expected: what has to be installed; a worker that came later than the others were asked is refused by it. The first
    job of a process compiles the kernels, or takes them from the cache of its machine.
    """
    wrong = differences(installed(), expected)
    if wrong:
        raise WorkError(
            f"The worker on {socket.gethostname()} has other versions: {'; '.join(wrong)}. Stop it or bring it up to "
            "date, and give the same command again."
        )
    _warm_up()
    work, job = pickle.loads(packed)
    for pause in (1.0, 4.0):
        try:
            return work(job)
        except OSError:  # a shared folder may show what another machine wrote only after a moment
            time.sleep(pause)
    return work(job)


def _warm_up() -> None:
    """Compile the kernels, or take them from the cache.

    The workers of one machine take turns: what the first has compiled, the others load.
    """
    from lattice_census.kernels import all_kept, warm_up
    from lattice_census.kernels.cache import root

    with _warming:
        if _warmed:
            return
        with (root() / "compiling.lock").open("a") as file:
            if not all_kept():
                with suppress(OSError):  # a file system without locks: each compiles for itself
                    fcntl.flock(file, fcntl.LOCK_EX)
            warm_up()
        _warmed.append(True)


_warmed: list[bool] = []
