"""Verification of candidate pairs, one core: time a pair over the mix, cubic metrics apart, both ways round."""

from __future__ import annotations

import time
from typing import Any

import numpy as np

from lattice_census.grouping.candidates import Search, candidate_pairs, start_search
from lattice_census.grouping.verification import verify
from lattice_census.grouping.window import Window, near_window
from lattice_census.kernels import warm_up
from lattice_census.tolerances import Tolerances

from .figures import Figure, Options, Report
from .structures import one_composition

BLOCK = 200


def run(options: Options) -> Report:
    """Microseconds a pair: median over blocks of the mix, and of pairs whose first crystal has a cubic metric."""
    warm_up()
    window = near_window(Tolerances())
    crystals, _, known = one_composition(options, 2000)
    search = start_search(crystals, window)
    begun = time.perf_counter()
    pairs = candidate_pairs(search).pairs
    listing = time.perf_counter() - begun
    verify(search.prepared, pairs[:2], window)
    order = np.random.default_rng(1).permutation(len(pairs))
    cubic = _cubic(crystals.cells)[pairs[order, 0]]
    figures = [Figure("listing candidates", listing / len(crystals) * 1e6, "us/structure")]
    for name, chosen, reach in (
        ("pair", pairs[order][~cubic], 80.0),
        ("pair, cubic metric", pairs[order][cubic], None),
    ):
        times = [
            min(_seconds(search, block, window) for _ in range(options.times(3))) / len(block) * 1e6
            for block in (chosen[start : start + BLOCK] for start in range(0, len(chosen), BLOCK))
        ]
        if times:
            figures.append(Figure(name, float(np.median(times)), "us/pair", min(times), max(times), reach))
    one, other = verify(search.prepared, pairs, window), verify(search.prepared, pairs[:, ::-1], window)
    np.testing.assert_allclose(one.largest_shift, other.largest_shift, atol=1e-9)
    if known is not None:
        _check(pairs, one, known)
    sizes = {"structures": len(crystals), "candidates": len(pairs), "near": int((one.grade < 2).sum())}
    return Report("verify", sizes, tuple(figures))


def _check(pairs: np.ndarray, found: Any, known: np.ndarray) -> None:
    """No two crystals are near, and a candidate pair of one crystal is (moved by up to 0.04 against each other)."""
    one = known[pairs[:, 0]] == known[pairs[:, 1]]
    near = found.grade < 2
    assert not (near & ~one).any(), f"{int((near & ~one).sum())} pairs of different crystals match"
    assert near[one].mean() >= 0.99, f"only {near[one].mean():.4f} of the pairs of one crystal match"


def _seconds(search: Search, block: np.ndarray, window: Window) -> float:
    begun = time.perf_counter()
    verify(search.prepared, block, window)
    return time.perf_counter() - begun


def _cubic(cells: np.ndarray) -> np.ndarray:
    """Cells whose three edges and three angles are equal to a percent."""
    g = cells @ cells.transpose(0, 2, 1)
    edges = np.sqrt(np.einsum("nii->ni", g))
    cosines = np.stack([g[:, i, j] / (edges[:, i] * edges[:, j]) for i, j in ((0, 1), (0, 2), (1, 2))], 1)
    return (np.ptp(edges, axis=1) / edges.mean(1) < 0.01) & (np.ptp(np.abs(cosines), axis=1) < 0.01)
