"""Compiled kernels: arrays in, arrays out, no logging.

Kernels are compiled on first use and kept between runs (cache.py says where).
"""

from __future__ import annotations

import time
from collections.abc import Callable
from importlib import import_module

from .sharing import kept, second_process, without_collecting

SHARES: tuple[tuple[str, ...], tuple[str, ...]] = (
    ("canonical", "translations", "lattice_type", "operations"),
    ("match", "lattice_maps", "witness_pairing", "frames", "rows_filter", "near_translations", "distances"),
)
"""What two processes compile at once: kernels that call the same functions stand together, and the halves take equally
long."""

MODULES: tuple[str, ...] = SHARES[0] + SHARES[1]
"""Modules of this package that offer `warm_up()`, which runs each of their kernels once on a small input."""


def all_kept() -> bool:
    """Whether the compiled code of every module is in the cache: then `warm_up` takes about a second."""
    return kept(MODULES)


def warm_up(report: Callable[[str], None] | None = None) -> float:
    """Compile, or load from the cache, every kernel once; returns the seconds it took.

    `report`, if given, is called with the name of each module before its kernels are compiled or loaded. Where there
    are two cores, a second process compiles the second share meanwhile.
    """
    start = time.perf_counter()
    with second_process(SHARES[1]) as shared, without_collecting():
        for name in MODULES:
            if name == SHARES[1][0]:
                shared()
            if report is not None:
                report(name)
            compile_module(name)
    return time.perf_counter() - start


def compile_module(name: str) -> None:
    """Compile, or load from the cache, the kernels of one module."""
    import_module(f"{__name__}.{name}").warm_up()
