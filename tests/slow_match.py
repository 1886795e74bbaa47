"""The matcher's slow plain twin: brute force over common cells, lattice maps, origins and assignments, in NumPy.

Written from the definition of a match alone. It knows nothing of approximate translations, distance rows or reduced
forms of the product: it tries every pair of sublattices up to a given index, every basis of the one whose stretches
are within the window, and every origin, and pairs sites by the assignment with the smallest largest shift.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from scipy.optimize import linear_sum_assignment

from .strategies import Crystal, hermite_matrices, reduced, supercell


@dataclass
class SlowMatch:
    """Best match found: grade 0 (same), 1 (near), 2 (window), or None where there is none."""

    grade: int
    shift: float
    strain: float
    shape_strain: float
    rms: float
    proper: bool


def log_stretches(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Logarithms of the singular values of F, first @ F = second."""
    return np.log(np.linalg.svd(np.linalg.solve(first, second), compute_uv=False))


def slow_maps(first: np.ndarray, second: np.ndarray, limit: float) -> list[np.ndarray]:
    """All bases of the lattice of `second` whose stretches against the basis `first` are within the limit."""
    start = reduced(second)
    reach = np.exp(limit) * np.linalg.norm(first, axis=1).max() * 1.000001
    box = np.floor(reach * np.linalg.norm(np.linalg.inv(start), axis=0)).astype(int)
    grid = np.array(list(itertools.product(*(range(-b, b + 1) for b in box))))
    vectors = grid @ start
    lengths = np.linalg.norm(vectors, axis=1)
    shells = []
    for row in first:
        r = np.linalg.norm(row)
        near = np.abs(np.log(np.maximum(lengths, 1e-9) / r)) <= limit + 1e-9
        shells.append(vectors[near])
    out = []
    volume = abs(np.linalg.det(first))
    for a in shells[0]:
        for b in shells[1]:
            pair = np.abs(a @ b - first[0] @ first[1])
            if pair > 3 * limit * np.linalg.norm(a) * np.linalg.norm(b) + 1e-6:
                continue
            if not len(shells[2]):
                continue
            volumes = np.abs(shells[2] @ np.cross(a, b))
            for c in shells[2][np.abs(np.log(np.maximum(volumes, 1e-9) / volume)) <= 3 * limit + 1e-9]:
                basis = np.array([a, b, c])
                if np.abs(log_stretches(first, basis)).max() <= limit + 1e-9:
                    out.append(basis)
    return out


def bottleneck(distance2: np.ndarray) -> np.ndarray:
    """The assignment (columns for rows) with the smallest largest entry, by trying the entries as limits in turn."""
    steps = np.unique(np.concatenate([distance2.min(axis=0), distance2.min(axis=1), distance2.ravel()]))
    steps = steps[steps >= max(distance2.min(axis=0).max(), distance2.min(axis=1).max())]
    low, high = 0, len(steps) - 1
    while low < high:
        middle = (low + high) // 2
        cost = (distance2 > steps[middle]).astype(float)
        rows, columns = linear_sum_assignment(cost)
        if cost[rows, columns].sum() == 0:
            high = middle
        else:
            low = middle + 1
    cost = np.where(distance2 > steps[low], 1e6, distance2)
    return linear_sum_assignment(cost)[1]


def grade_of(shift: float, strain: float, shifts: tuple, strains: tuple) -> int | None:
    """The strictest of the three limits kept by both (after rounding to 1e-9)."""
    for g in range(3):
        if round(shift, 9) <= shifts[g] + 1e-12 and round(strain, 9) <= strains[g] + 1e-12:
            return g
    return None


def slow_match(
    a: Crystal, b: Crystal, shifts: tuple, strains: tuple, largest_index: int = 1, proper_only: bool = False
) -> SlowMatch | None:
    """The recorded match of two crystals among all common cells with |det P|, |det Q| <= largest_index."""
    if {t: a[2].count(t) / len(a[2]) for t in set(a[2])} != {t: b[2].count(t) / len(b[2]) for t in set(b[2])}:
        return None
    best: SlowMatch | None = None
    for dp, dq in itertools.product(range(1, largest_index + 1), repeat=2):
        if len(a[2]) * dp != len(b[2]) * dq:
            continue
        for p in hermite_matrices(dp):
            first = supercell(a, p)
            for q in hermite_matrices(dq):
                second = supercell(b, q)
                for basis in slow_maps(first[0], second[0], strains[2]):
                    found = _best_on_map(first, second, basis, shifts, strains, proper_only)
                    if found is not None and (best is None or _better(found, best)):
                        best = found
    return best


def _better(x: SlowMatch, y: SlowMatch) -> bool:
    return (x.grade, round(x.shift, 9), not x.proper, round(x.strain, 9)) < (
        y.grade, round(y.shift, 9), not y.proper, round(y.strain, 9),
    )  # fmt: skip


def _best_on_map(first, second, basis, shifts, strains, proper_only):
    proper = np.linalg.det(first[0]) * np.linalg.det(basis) > 0
    if proper_only and not proper:
        return None
    logs = log_stretches(first[0], basis)
    strain, shape = np.abs(logs).max(), np.abs(logs - logs.mean()).max()
    u = first[1]
    v = second[1] @ second[0] @ np.linalg.inv(basis)
    g = (first[0] @ first[0].T + basis @ basis.T) / 2
    images = np.array(list(itertools.product((-1, 0, 1), repeat=3)))
    kinds = sorted(set(first[2]), key=lambda t: (first[2].count(t), t))
    tokens_a, tokens_b = np.array(first[2]), np.array(second[2])
    pin = int(np.flatnonzero(tokens_a == kinds[0])[0])
    best = None
    for origin in np.flatnonzero(tokens_b == kinds[0]):
        shift = v[origin] - u[pin]
        previous = None
        for _ in range(20):
            d = v[None, :] - u[:, None] - shift
            d = d - np.round(d)
            if np.linalg.norm(first[0], axis=1).min() < 2.0:  # small cells: the rounded image need not be the nearest
                all_d = d[:, :, None] + images
                r = np.einsum("...i,ij,...j", all_d, g, all_d)
                d = np.take_along_axis(all_d, r.argmin(axis=2)[:, :, None, None], axis=2)[:, :, 0]
            r = np.einsum("...i,ij,...j", d, g, d)
            r[tokens_a[:, None] != tokens_b[None]] = 1e6
            if np.sqrt(r.min(axis=1).max()) > 2 * shifts[2] + 1e-6:
                break
            pairing = bottleneck(r)
            chosen = d[np.arange(len(u)), pairing]
            mean = chosen.mean(axis=0)
            shift = shift + mean
            lengths = np.einsum("ni,ij,nj->n", chosen - mean, g, chosen - mean)
            largest = np.sqrt(lengths.max())
            grade = grade_of(largest, strain, shifts, strains)
            if grade is not None:
                found = SlowMatch(grade, largest, strain, shape, np.sqrt(lengths.mean()), bool(proper))
                if best is None or _better(found, best):
                    best = found
            if previous is not None and (previous == pairing).all():
                break
            previous = pairing
    return best
