"""Timings with median and spread, and the reference they are compared with."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import spglib

from lattice_census.model.batch import CrystalBatch


def timed(work: Callable[[], Any], repeat: int) -> tuple[Any, dict[str, float]]:
    """The result of the last of `repeat` calls, and seconds: median, least and greatest."""
    seconds = []
    result = None
    for _ in range(repeat):
        begun = time.perf_counter()
        result = work()
        seconds.append(time.perf_counter() - begun)
    return result, summary(seconds)


def summary(seconds: list[float]) -> dict[str, float]:
    """Median, least and greatest of repeated timings."""
    return {"median_s": statistics.median(seconds), "least_s": min(seconds), "greatest_s": max(seconds)}


def reference_seconds(batch: CrystalBatch, most: int = 500) -> float:
    """Seconds a structure of spglib.get_symmetry_dataset at symprec 0.01 on one core, over `most` of the structures."""
    rows = np.linspace(0, len(batch) - 1, min(most, len(batch))).astype(int)
    cells = [(batch.cells[i], batch.positions[batch.sites(i)], batch.species[batch.sites(i)] + 1) for i in rows]
    begun = time.perf_counter()
    for cell in cells:
        spglib.get_symmetry_dataset(cell, symprec=0.01)
    return (time.perf_counter() - begun) / len(cells)


def against(reference: float, seconds: dict[str, float], count: int) -> dict[str, float]:
    """Structures a second and the ratio of the time a structure to the reference."""
    each = seconds["median_s"] / count
    return {
        **seconds,
        "structures_per_s": 1 / each,
        "us_per_structure": each * 1e6,
        "ratio_to_reference": each / reference,
    }


def reference_numbers(batch: CrystalBatch, most: int = 300) -> list[int]:
    """Space groups of the first `most` crystals by the reference."""
    out = []
    for i in range(min(most, len(batch))):
        sites = batch.sites(i)
        found = spglib.get_symmetry_dataset(
            (batch.cells[i], batch.positions[sites], batch.species[sites] + 1), symprec=0.01
        )
        out.append(found.number if found is not None else 0)
    return out
