"""Timings with median and spread, and the reference they are compared with."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import spglib

from lattice_census.model.batch import CrystalBatch

from .figures import Figure


@dataclass(frozen=True, slots=True)
class Seconds:
    """Repeated timings of one thing."""

    taken: tuple[float, ...]

    @property
    def median(self) -> float:
        """The one that counts."""
        return statistics.median(self.taken)

    def __add__(self, other: Seconds) -> Seconds:
        return Seconds(tuple(a + b for a, b in zip(self.taken, other.taken, strict=True)))

    def figure(self, what: str, unit: str = "s", factor: float = 1.0, reach: float | None = None) -> Figure:
        """Median and spread times a factor."""
        least, greatest = min(self.taken) * factor, max(self.taken) * factor
        return Figure(what, self.median * factor, unit, least, greatest, reach)


def timed(work: Callable[[], Any], repeat: int) -> tuple[Any, Seconds]:
    """The result of the last of `repeat` calls, and their seconds."""
    seconds = []
    result = None
    for _ in range(repeat):
        begun = time.perf_counter()
        result = work()
        seconds.append(time.perf_counter() - begun)
    return result, Seconds(tuple(seconds))


def reference(batch: CrystalBatch, repeat: int, most: int = 500) -> Seconds:
    """Seconds a structure of spglib.get_symmetry_dataset at symprec 0.01 on one core, over `most` of the structures."""
    cells = [(batch.cells[i], batch.positions[batch.sites(i)], batch.species[batch.sites(i)] + 1) for i in
             np.linspace(0, len(batch) - 1, min(most, len(batch))).astype(int)]  # fmt: skip
    spglib.get_symmetry_dataset(cells[0], symprec=0.01)

    def work() -> None:
        for cell in cells:
            spglib.get_symmetry_dataset(cell, symprec=0.01)

    _, seconds = timed(work, repeat)
    return Seconds(tuple(s / len(cells) for s in seconds.taken))


def ratio(what: str, ours: Seconds, count: int, theirs: Seconds, reach: float | None = None) -> Figure:
    """Our time a structure over the reference's; the spread is that of both."""
    least = min(ours.taken) / count / max(theirs.taken)
    greatest = max(ours.taken) / count / min(theirs.taken)
    return Figure(what, ours.median / count / theirs.median, "x reference", least, greatest, reach)


def each(what: str, ours: Seconds, count: int) -> Figure:
    """Microseconds a structure."""
    return ours.figure(what, "us/structure", 1e6 / count)


def exponent(sizes: Sequence[float], values: Sequence[float]) -> float:
    """The slope of log value over log size: 1 is linear, 2 quadratic."""
    return float(np.polyfit(np.log(sizes), np.log(values), 1)[0])


def sure_numbers(batch: CrystalBatch, most: int = 300) -> list[int | None]:
    """Space groups of the first `most` crystals by the reference, where it finds the same ones at half and at twice the
    tolerance; else None: near the tolerance two programs may differ."""
    at = [_numbers(batch, most, symprec) for symprec in (0.005, 0.01, 0.02)]
    return [found[1] if len(set(found)) == 1 else None for found in zip(*at, strict=True)]


def _numbers(batch: CrystalBatch, most: int, symprec: float) -> list[int]:
    out = []
    for i in range(min(most, len(batch))):
        sites = batch.sites(i)
        cell = (batch.cells[i], batch.positions[sites], batch.species[sites] + 1)
        found = spglib.get_symmetry_dataset(cell, symprec=symprec)
        out.append(found.number if found is not None else 0)
    return out
