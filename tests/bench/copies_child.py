"""Grouping one composition in a process of its own: `python -m tests.bench.copies_child JSON`; JSON on stdout.

A line `ready` is printed before, and the grouping begins when a line comes in, so that its memory can be told apart.
"""

from __future__ import annotations

import json
import sys
import time

import numpy as np

from lattice_census.grouping.composition import group_composition
from lattice_census.kernels import warm_up
from lattice_census.tolerances import Tolerances
from tests.invariants import check_matches

from .collection import Kind
from .group import check_families
from .structures import canonical_of, invented
from .timing import timed


def main() -> None:
    """Group, check, and tell."""
    *kind, count = json.loads(sys.argv[1])
    warm_up()
    made = invented(Kind(*kind), count)
    canonical = canonical_of(made.batch)
    assert len(canonical) == count, "records were refused"
    ids = [f"{i:020x}" for i in range(count)]
    few = min(count, 20)
    group_composition(canonical_of(invented(Kind(*kind), few).batch).crystals, canonical.crystal_key[:few], ids[:few],
                      np.arange(few), Tolerances())  # fmt: skip
    print("ready", flush=True)
    sys.stdin.readline()
    busy = time.process_time()
    found, seconds = timed(
        lambda: group_composition(canonical.crystals, canonical.crystal_key, ids, np.arange(count), Tolerances()), 1
    )
    busy = time.process_time() - busy
    check_matches(found)
    check_families(found, made.crystal[canonical.rows], 1.0)
    print(json.dumps({"seconds": seconds.median, "processor_s": busy, "counts": found.counts}))


if __name__ == "__main__":
    main()
