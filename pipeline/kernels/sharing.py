"""Two processes that compile at once: numba itself uses one core, whatever it has to compile.

The second process compiles its share into the same folder and ends; this one then takes that code from the cache. What
the second did not finish, for whatever reason, this one compiles, so that nothing depends on it but time. The two never
write the same file: numba keeps one index a function, and a function belongs to one share.
"""

from __future__ import annotations

import gc
import os
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

from .cache import folder, root

_PROGRAM = "from {package}.sharing import compile_share; compile_share({names!r})"


def kept(names: Sequence[str]) -> bool:
    """Whether each of the modules has compiled code in the cache, in its present state."""
    files = (folder(Path(__file__).with_name(f"{name}.py")) for name in names)
    return all(next(kept_in.rglob("*.nbi"), None) is not None for kept_in in files)


def cores() -> int:
    """How many cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@contextmanager
def second_process(names: Sequence[str]) -> Iterator[Callable[[], None]]:
    """Have the modules compiled by another process where that pays; gives a function that waits for its end.

    The other process ends early when this one leaves the context, or is gone.
    """
    other = None
    if cores() > 1 and not kept(names) and sys.executable:
        other = _begin(names)

    def wait() -> None:
        if other is not None:
            other.wait()

    try:
        yield wait
    finally:
        if other is not None:
            other.kill()
            other.communicate()


@contextmanager
def without_collecting() -> Iterator[None]:
    """Let the compiler's objects be: looking through them for rubbish takes a tenth of the time, and most live on."""
    collecting = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if collecting:
            gc.enable()


def _begin(names: Sequence[str]) -> subprocess.Popen[bytes] | None:
    """Start the other process; None where the system does not let us."""
    program = _PROGRAM.format(package=__package__, names=tuple(names))
    paths = os.pathsep.join(path for path in sys.path if path)
    try:
        # -P: the current folder is no place to import from. Its input is how it learns that this process is gone.
        return subprocess.Popen(
            [sys.executable, "-P", "-c", program],
            stdin=subprocess.PIPE,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            env={**os.environ, "NUMBA_CACHE_DIR": str(root()), "PYTHONPATH": paths},
        )
    except OSError:
        return None


def _end_with_input() -> None:
    """End this process when the one that started it is gone, which closes the input however it went."""

    def watch() -> None:
        sys.stdin.buffer.read()
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


def compile_share(names: Sequence[str]) -> None:
    """Compile the kernels of the modules: the whole work of the other process."""
    from . import compile_module

    _end_with_input()
    with without_collecting():
        for name in names:
            compile_module(name)
