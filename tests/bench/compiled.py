"""Compiled functions of the benchmark, kept in a folder named by the digest of the sources that they are made of.

numba looks at the file of a function alone and would go on running old code of the others.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba

from lattice_census.kernels import cache

SOURCES = ("collection.py", "invented.py", "invented_disguises.py", "numbered_draws.py")


def compiled(function: Callable[..., Any]) -> Callable[..., Any]:
    """Compile on the first call, and keep the code between runs."""
    digest = hashlib.sha256(b"".join((Path(__file__).parent / name).read_bytes() for name in SOURCES)).hexdigest()[:16]
    config: Any = numba.config
    before, config.CACHE_DIR = config.CACHE_DIR, str(cache.root() / f"bench-{digest}")
    try:
        return numba.njit(cache=True)(function)
    finally:
        config.CACHE_DIR = before
