"""Where compiled code is kept between runs.

numba looks at the file of a kernel alone to decide whether its kept code is still good, so that a kernel would go on
running old code of another file, or with an old constant. Here each module keeps its code in a folder named by the
digest of its source and of all sources of the package that it imports, which cannot happen to it.
"""

from __future__ import annotations

import hashlib
import os
import re
import sys
import tempfile
from functools import cache
from pathlib import Path

PACKAGE = Path(__file__).parent.parent
_IMPORT = re.compile(r"^\s*from (\.+)([\w.]*) import (\([^)]*\)|.*)", re.MULTILINE)


def sources(module: Path) -> list[Path]:
    """The file of a module and all files of the package that it imports, directly or not, in order of path."""
    found: set[Path] = set()
    left = [module]
    while left:
        path = left.pop()
        if path in found or not path.is_file():
            continue
        found.add(path)
        for dots, name, names in _IMPORT.findall(path.read_text(encoding="utf-8")):
            folder = path.parents[len(dots) - 1]
            base = folder.joinpath(*name.split(".")) if name else folder
            left += [base.with_suffix(".py"), base / "__init__.py"]
            left += [base / f"{n}.py" for n in re.findall(r"\w+", names)]
    return sorted(found)


def digest(module: Path) -> str:
    """16 hex digits that change when a source that the module's code depends on changes."""
    total = hashlib.sha256()
    for path in sources(module):
        total.update(path.relative_to(PACKAGE).as_posix().encode() + b"\0")
        total.update(hashlib.sha256(path.read_bytes()).digest())
    return total.hexdigest()[:16]


def writable(folder: Path) -> bool:
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


def candidates() -> list[Path]:
    """Folders in which compiled code may be kept, best first.

    The one that NUMBA_CACHE_DIR names; beside the sources; the user's cache folder; the temporary folder.
    """
    if sys.platform == "darwin":
        user = Path.home() / "Library" / "Caches"
    else:
        user = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")
    owner = os.getuid() if hasattr(os, "getuid") else 0
    named = os.environ.get("NUMBA_CACHE_DIR")
    return ([Path(named)] if named else []) + [
        Path(__file__).parent / "__pycache__",
        user / "lattice-census",
        Path(tempfile.gettempdir()) / f"lattice-census-{owner}",
    ]


@cache
def root() -> Path:
    """The first of the candidates that can be written. Raises OSError where there is none."""
    for folder in candidates():
        if writable(folder):
            return folder
    raise OSError("no folder can be written for compiled kernels; set NUMBA_CACHE_DIR to one that can")


@cache
def folder(module: Path) -> Path:
    """The folder for the compiled code of a module (its file), in its present state."""
    return root() / f"{module.stem}-{digest(module)}"
