"""Compiled kernels: arrays in, arrays out, no logging.

Kernels are compiled on first use and kept between runs (cache.py says where).
"""

from __future__ import annotations

import time
from collections.abc import Callable
from importlib import import_module

MODULES: tuple[str, ...] = (
    "canonical",
    "translations",
    "lattice_type",
    "operations",
    "distances",
    "lattice_maps",
    "near_translations",
    "rows_filter",
    "match",
    "witness_pairing",
)
"""Modules of this package that offer `warm_up()`, which runs each of their kernels once on a small input."""


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
