"""Noisy copies of one crystal, and many crystals of one composition: time and memory must not follow the pairs."""

from __future__ import annotations

import json
import subprocess
import sys
from dataclasses import dataclass
from typing import Any

import numpy as np

from lattice_census.grouping.composition import Options as GroupOptions
from lattice_census.grouping.composition import group_composition
from lattice_census.grouping.verification import verify
from lattice_census.tolerances import Tolerances
from tests.invariants import check_grouping, check_matches

from .collection import ONE_COMPOSITION, ONE_CRYSTAL, Kind
from .figures import Figure, Options, Report
from .group import check_families
from .night import ROOT
from .process_tree import MemoryOfTree
from .structures import canonical_of, invented
from .timing import Seconds, exponent

QUADRATIC = 1.5
"""Largest exponent of growth that is not called quadratic: n log n has 1.1 over these sizes, and time of which half is
linear and half quadratic has 1.5."""

MOST_COPIES = 5000
"""Copies of one crystal."""

OFTEN = 0.02
"""Seconds between samples of the memory: the smallest grouping takes a quarter of a second."""

BRUTE = 150
"""Copies that are compared pair by pair."""


@dataclass(frozen=True, slots=True)
class Grouped:
    """One grouping in a process of its own."""

    seconds: float
    processor_s: float
    grouping_bytes: int
    """Peak memory of the process less what it had before the grouping."""

    counts: dict[str, int]


def run(options: Options) -> Report:
    """Exponents over 1,250, 2,500 and 5,000 copies of one crystal, and over N/16, N/4 and N records of one composition
    (`--records` is N; with fewer than 5,000 there are no more copies than that)."""
    count = options.count(20_000)
    most = min(MOST_COPIES, count)
    figures: list[Figure] = []
    brute_force(min(BRUTE, count))
    for name, kind, sizes in (
        ("copies of one crystal", ONE_CRYSTAL, (most // 4, most // 2, most)),
        ("records of one composition", ONE_COMPOSITION, (count // 16, count // 4, count)),
    ):
        figures += growth(name, kind, sizes, options.times(1))
    sizes_told = {"copies": most, "records of one composition": count, "compared pair by pair": min(BRUTE, count)}
    return Report("copies", sizes_told, tuple(figures))


def growth(name: str, kind: Kind, sizes: tuple[int, ...], repeat: int) -> list[Figure]:
    """Seconds and memory at each size, and the exponents (of processor time, which a busy machine changes less)."""
    figures = []
    times: list[float] = []
    peaks: list[float] = []
    for n in sizes:
        done = [grouped(kind, n) for _ in range(repeat)]
        seconds = Seconds(tuple(d.seconds for d in done))
        times.append(Seconds(tuple(d.processor_s for d in done)).median)
        peaks.append(max(d.grouping_bytes for d in done))
        figures.append(seconds.figure(f"{n} {name}"))
        figures.append(Figure(f"{n} {name}, pairs compared a record", done[-1].counts["verified"] / n, "pairs"))
        figures.append(Figure(f"{n} {name}, memory", peaks[-1] / 2**20, "MiB"))
    # A peak under a few MiB is noise.
    steady = [max(p, 2.0**22) for p in peaks]
    figures.append(Figure(f"{name}: exponent of processor time", exponent(sizes, times), "", reach=QUADRATIC))
    figures.append(Figure(f"{name}: exponent of memory", exponent(sizes, steady), "", reach=QUADRATIC))
    return figures


def grouped(kind: Kind, count: int) -> Grouped:
    """Group so many records in a process of its own, which checks the families; AssertionError where they are wrong."""
    asked = [kind.seed, kind.copies, kind.common, kind.noise, kind.formulas, count]
    command = [sys.executable, "-m", "tests.bench.copies_child", json.dumps(asked)]
    process = subprocess.Popen(
        command, cwd=ROOT, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    assert process.stdout is not None and process.stdin is not None
    ready = process.stdout.readline()  # everything is loaded and made; now it waits for a word
    with MemoryOfTree(process.pid) as before:
        pass
    with MemoryOfTree(process.pid, OFTEN) as memory:
        told, errors = process.communicate("go\n")
    assert ready and process.returncode == 0, f"grouping {count} records failed: {errors.strip().splitlines()[-1:]}"
    found = json.loads(told)
    return Grouped(
        found["seconds"], found["processor_s"], max(memory.peak_bytes - before.peak_bytes, 0), found["counts"]
    )


def brute_force(count: int) -> None:
    """Families and groups of noisy copies against all pairs, compared one by one, with crowds from few records on.

    Raises AssertionError where they differ.
    """
    made = invented(Kind(copies=0.97, common=1.0, formulas=1), count)
    canonical = canonical_of(made.batch)
    crystals, keys = canonical.crystals, canonical.crystal_key
    ids = [f"{i:020x}" for i in range(len(crystals))]
    rank = np.random.default_rng(3).permutation(len(ids))
    found = group_composition(crystals, keys, ids, rank, Tolerances(), GroupOptions(crowded=10))
    check_matches(found)
    check_families(found, made.crystal[canonical.rows], 1.0)
    check_grouping(found, dict(zip(ids, rank.tolist(), strict=True)), _all_pairs(crystals, keys, ids), "near")


def _all_pairs(crystals: Any, keys: list[str], ids: list[str]) -> dict[tuple[str, str], bool]:
    """Whether each two records are near, without any filter: the matcher on every pair of keys."""
    from lattice_census.grouping.candidates import start_search
    from lattice_census.grouping.window import near_window

    window = near_window(Tolerances())
    search = start_search(crystals, window)
    first, second = np.triu_indices(len(ids), 1)
    pairs = np.stack([first, second], axis=1).astype(np.int64)
    near = verify(search.prepared, pairs, window).grade < 2
    out = {}
    for (a, b), is_near in zip(pairs.tolist(), near.tolist(), strict=True):
        out[ids[a], ids[b]] = out[ids[b], ids[a]] = is_near or keys[a] == keys[b]
    return out
