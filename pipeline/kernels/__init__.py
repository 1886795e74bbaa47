"""Compiled kernels: arrays in, arrays out, no logging.

Compiled code is kept between runs in a folder of its own for each state of the sources. numba looks only at the file of
a kernel itself, so that a kernel would go on running old code of another file; a folder named by the digest of all
sources cannot. The folder is chosen here, before any module of this package imports numba.
"""

from __future__ import annotations

import hashlib
import os
import sys
import tempfile
import time
from collections.abc import Callable
from importlib import import_module
from pathlib import Path

MODULES: tuple[str, ...] = ("canonical", "translations")
"""Modules of this package that offer `warm_up()`, which runs each of their kernels once on a small input."""


def _digest() -> str:
    found = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        found.update(path.name.encode())
        found.update(path.read_bytes())
    return found.hexdigest()[:16]


def _writable(folder: Path) -> bool:
    """Whether files can be made in the folder, which is created for the user alone where it does not exist."""
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        # Compiled code is unpickled: a folder that somebody else made must not be read.
        if hasattr(os, "getuid") and folder.stat().st_uid != os.getuid():
            return False
        with tempfile.TemporaryFile(dir=folder):
            return True
    except OSError:
        return False


def _folders() -> list[Path]:
    """Where compiled code may be kept, best first: beside the sources, the user's cache folder, a temporary one."""
    if sys.platform == "darwin":
        user = Path.home() / "Library" / "Caches"
    else:
        user = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")
    owner = os.getuid() if hasattr(os, "getuid") else 0
    return [
        Path(__file__).parent / "__pycache__",
        user / "lattice-census",
        Path(tempfile.gettempdir()) / f"lattice-census-{owner}",
    ]


def cache_folder() -> Path:
    """The folder for compiled code of this state of the sources. Raises OSError where no folder can be written."""
    for base in _folders():
        folder = base / f"kernels-{_digest()}"
        if _writable(base) and _writable(folder):
            return folder
    raise OSError("no folder can be written for compiled kernels; set NUMBA_CACHE_DIR to one that can")


def _choose_cache() -> None:
    if os.environ.get("NUMBA_CACHE_DIR"):
        return
    folder = str(cache_folder())
    os.environ["NUMBA_CACHE_DIR"] = folder
    if "numba" in sys.modules:  # Imported before by somebody else: its settings are read already.
        sys.modules["numba"].config.CACHE_DIR = folder


_choose_cache()


def warm_up(report: Callable[[str], None] | None = None) -> float:
    """Compile, or load from the cache, every kernel once; returns the seconds it took.

    `report`, if given, is called with the name of each module before its kernels are compiled.
    """
    start = time.perf_counter()
    for name in MODULES:
        if report is not None:
            report(name)
        import_module(f"{__name__}.{name}").warm_up()
    return time.perf_counter() - start
