"""Verification of candidate pairs, one core: time a pair over the mix, cubic metrics apart, against the slow twin."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import numpy as np

from lattice_census.grouping.candidates import candidate_pairs, start_search
from lattice_census.grouping.verification import verify
from lattice_census.grouping.window import near_window
from lattice_census.tolerances import Tolerances

from .structures import canonical_of, largest_composition, load

BLOCK = 200


def run(file: Path | None, repeat: int) -> dict[str, Any]:
    """Microseconds a pair: median over blocks of the mix, and by the symmetry of the first crystal's metric."""
    window = near_window(Tolerances())
    crystals, _ = largest_composition(canonical_of(load(file)))
    search = start_search(crystals, window)
    begun = time.perf_counter()
    pairs = candidate_pairs(search).pairs
    listing = time.perf_counter() - begun
    verify(search.prepared, pairs[:2], window)
    order = np.random.default_rng(1).permutation(len(pairs))
    cubic = _cubic(crystals.cells)[pairs[order, 0]]
    found = {}
    for name, chosen in (("mix", pairs[order][~cubic]), ("cubic", pairs[order][cubic])):
        times = []
        for start in range(0, len(chosen), BLOCK):
            block = chosen[start : start + BLOCK]
            best = min(_seconds(search, block, window) for _ in range(repeat))
            times.append(best / len(block) * 1e6)
        if times:
            found[name] = {
                "pairs": len(chosen), "median_us": float(np.median(times)), "least_us": min(times),
                "greatest_us": max(times),
            }  # fmt: skip
    one, other = verify(search.prepared, pairs, window), verify(search.prepared, pairs[:, ::-1], window)
    np.testing.assert_allclose(one.largest_shift, other.largest_shift, atol=1e-9)
    return {
        "structures": len(crystals),
        "candidates": len(pairs),
        "listing_candidates_s": listing,
        "matches": int((one.grade < 3).sum()),
        "near": int((one.grade < 2).sum()),
        "us_per_pair": found,
    }


def _seconds(search: Any, block: np.ndarray, window: Any) -> float:
    begun = time.perf_counter()
    verify(search.prepared, block, window)
    return time.perf_counter() - begun


def _cubic(cells: np.ndarray) -> np.ndarray:
    """Cells whose three edges and three angles are equal to a percent."""
    g = cells @ cells.transpose(0, 2, 1)
    edges = np.sqrt(np.einsum("nii->ni", g))
    cosines = np.stack([g[:, i, j] / (edges[:, i] * edges[:, j]) for i, j in ((0, 1), (0, 2), (1, 2))], 1)
    return (np.ptp(edges, axis=1) / edges.mean(1) < 0.01) & (np.ptp(np.abs(cosines), axis=1) < 0.01)
