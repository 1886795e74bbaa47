"""Plain twins of the kernels of the canonical form: by definition and by exhaustion, in Python and NumPy."""

from __future__ import annotations

import itertools
from fractions import Fraction
from math import gcd

import numpy as np

from lattice_census.lattice.hermite import hermite_columns, hermite_rows
from lattice_census.lattice.niggli import is_niggli_reduced
from lattice_census.tolerances import GRID, GRID_OFFSET, NIGGLI_EPSILON
from tests.strategies import hermite_matrices, reduced


def niggli_steps(cell: np.ndarray, epsilon: float = NIGGLI_EPSILON, most: int = 2000) -> np.ndarray:
    """The reduced cell by the steps of Krivy & Gruber (1976) alone, vectors carried along, no shortening before."""
    a, b, c = (v / abs(np.linalg.det(cell)) ** (1 / 3) for v in cell)
    e = epsilon
    for _ in range(most):
        aa, bb, cc = a @ a, b @ b, c @ c
        xi, eta, zeta = 2 * b @ c, 2 * a @ c, 2 * a @ b
        if aa > bb + e or (abs(aa - bb) <= e and abs(xi) > abs(eta) + e):
            a, b, c = -b, -a, -c
            continue
        if bb > cc + e or (abs(bb - cc) <= e and abs(eta) > abs(zeta) + e):
            a, b, c = -a, -c, -b
            continue
        signs = [0 if abs(x) <= e else int(np.sign(x)) for x in (xi, eta, zeta)]
        if 0 not in signs and np.prod(signs) > 0:
            flip = [-1 if s < 0 else 1 for s in signs]
        else:
            flip = [-1 if s > 0 else 1 for s in signs]
            if np.prod(flip) < 0:
                flip[max(i for i in range(3) if signs[i] == 0)] *= -1
        if flip != [1, 1, 1]:
            a, b, c = flip[0] * a, flip[1] * b, flip[2] * c
            continue
        if abs(xi) > bb + e or (abs(xi - bb) <= e and 2 * eta < zeta - e) or (abs(xi + bb) <= e and zeta < -e):
            c = c - np.sign(xi) * b
        elif abs(eta) > aa + e or (abs(eta - aa) <= e and 2 * xi < zeta - e) or (abs(eta + aa) <= e and zeta < -e):
            c = c - np.sign(eta) * a
        elif abs(zeta) > aa + e or (abs(zeta - aa) <= e and 2 * xi < eta - e) or (abs(zeta + aa) <= e and eta < -e):
            b = b - np.sign(zeta) * a
        elif xi + eta + zeta + aa + bb < -e or (abs(xi + eta + zeta + aa + bb) <= e and 2 * (aa + eta) + zeta > e):
            c = a + b + c
        else:
            return np.array([a, b, c]) * abs(np.linalg.det(cell)) ** (1 / 3)
    raise AssertionError("the steps do not come to an end")


def all_reduced_bases(cell: np.ndarray, epsilon: float = NIGGLI_EPSILON) -> set[tuple[int, ...]]:
    """All matrices with entries from -2 to 2 and determinant 1 whose product with a reduced cell is reduced."""
    vectors = np.array([v for v in itertools.product(range(-2, 3), repeat=3) if any(v)])
    squares = ((vectors @ cell) ** 2).sum(1)
    rows = [vectors[np.abs(squares - s) < 0.01 * squares.min()] for s in (cell**2).sum(1)]
    triples = np.array([[a, b, c] for a in rows[0] for b in rows[1] for c in rows[2]])
    triples = triples[np.abs(np.linalg.det(triples) - 1) < 1e-6]
    frames = triples @ cell
    good = is_niggli_reduced(frames @ frames.transpose(0, 2, 1), epsilon)
    return {tuple(m.ravel().tolist()) for m in triples[good]}


def nearest(cell: np.ndarray, d: np.ndarray, shells: int = 1) -> np.ndarray:
    """Shortest Cartesian vectors (..., 3) equal to fractional d (..., 3) modulo the lattice, by trying images."""
    short = reduced(cell)
    f = d @ cell @ np.linalg.inv(short)
    f = f - np.rint(f)
    shifts = np.array(list(itertools.product(range(-shells, shells + 1), repeat=3)))
    images = (f[..., None, :] + shifts) @ short
    best = (images**2).sum(-1).argmin(-1)
    return np.take_along_axis(images, best[..., None, None], axis=-2)[..., 0, :]


def closest_pair(cell: np.ndarray, x: np.ndarray, limit: float) -> tuple[int, int, float] | None:
    """The closest two sites, or a site and its image, under a limit."""
    best = None
    shifts = np.array([s for s in itertools.product(range(-3, 4), repeat=3) if any(s)])
    own = np.linalg.norm(shifts @ reduced(cell), axis=1).min()
    if own < limit:
        best = (0, 0, float(own))
    for i, j in itertools.combinations(range(len(x)), 2):
        r = float(np.linalg.norm(nearest(cell, x[j] - x[i])))
        if r < (best[2] if best else limit):
            best = (i, j, r)
    return best


def mean_over_group(
    cell: np.ndarray, x: np.ndarray, tokens: list[str], group: list[np.ndarray], tolerance: float
) -> tuple[float, np.ndarray, list[int]] | None:
    """(residual, mean displacement (n, 3) fractional, first site of each orbit) of an accepted group; None if
    refused.
    """
    kinds = np.array(tokens)
    total = np.zeros_like(x)
    first = np.arange(len(x))
    for t in group:
        for s in range(len(x)):
            gap = nearest(cell, x - t - x[s])
            length = np.where(kinds == kinds[s], np.linalg.norm(gap, axis=1), np.inf)
            k = int(length.argmin())
            if length[k] > 2 * tolerance:
                return None
            total[s] += gap[k]
            first[s] = min(first[s], k)
    mean = total / len(group)
    residual = float(np.linalg.norm(mean, axis=1).max())
    if residual > tolerance:
        return None
    return residual, mean @ np.linalg.inv(cell), [s for s in range(len(x)) if first[s] == s]


def largest_group(
    cell: np.ndarray, x: np.ndarray, tokens: list[str], tolerance: float
) -> tuple[np.ndarray, np.ndarray, list[int]] | None:
    """The largest accepted group among all superlattices of every index: (H, averaged x, kept sites), cell = H new."""
    common = 0
    for t in set(tokens):
        common = gcd(common, tokens.count(t))
    for index in sorted((m for m in range(2, common + 1) if common % m == 0), reverse=True):
        accepted = []
        for h in hermite_matrices(index):
            # Superlattices of index m are those with cell = h' new for the column forms h' of determinant m.
            matrix = h.T
            inverse = np.linalg.inv(matrix)
            group = []
            for shift in itertools.product(range(index), repeat=3):
                f = np.array(shift) @ inverse
                f = f - np.floor(f + 1e-9)
                if all(np.abs(f - g).max() > 1e-6 for g in group):
                    group.append(f)
            assert len(group) == index
            found = mean_over_group(cell, x, tokens, group, tolerance)
            if found is not None:
                form = hermite_rows(np.rint(inverse * common).astype(int)).ravel().tolist()
                accepted.append((round(found[0] / 1e-9), form, matrix, found[1], found[2]))
        if accepted:
            _, _, matrix, mean, kept = min(accepted, key=lambda a: (a[0], a[1]))
            return matrix, x + mean, kept
    return None


def approximate_translations(
    cell: np.ndarray, x: np.ndarray, tokens: list[str], tolerance: float
) -> tuple[int, np.ndarray, float]:
    """(index, column Hermite form H, residual), repeated until nothing changes."""
    start_cell, start = cell, x
    whole = np.eye(3, dtype=int)
    while (found := largest_group(cell, x, tokens, tolerance)) is not None:
        matrix, averaged, kept = found
        whole = whole @ matrix
        cell = np.linalg.inv(matrix) @ cell
        x, tokens = (averaged @ matrix)[kept], [tokens[s] for s in kept]
    gap = np.linalg.norm(nearest(cell, (start @ whole)[:, None] - x[None]), axis=-1).min(axis=1)
    index = round(abs(np.linalg.det(whole)))
    assert index == len(start) // len(x) and start_cell.shape == cell.shape
    return index, hermite_columns(whole), float(gap.max())


def grid(x: np.ndarray) -> np.ndarray:
    return np.floor(np.asarray(x) * GRID + GRID_OFFSET).astype(int)


def smallest_description(
    cell: np.ndarray, x: np.ndarray, tokens: list[str]
) -> tuple[tuple[int, ...], list[tuple[int, ...]]]:
    """(metric numbers, sorted sites) of the smallest description of a primitive crystal in a reduced cell."""
    count = {t: tokens.count(t) for t in tokens}
    rank = {t: r for r, t in enumerate(sorted(count, key=lambda t: (count[t], t)))}
    rare = [s for s in range(len(x)) if rank[tokens[s]] == 0]
    scale = (abs(np.linalg.det(cell)) / len(x)) ** (2 / 3)
    candidates = []
    for m in all_reduced_bases(cell):
        matrix = np.array(m).reshape(3, 3)
        frame = matrix @ cell
        numbers = tuple(grid((frame @ frame.T / scale)[[0, 1, 2, 1, 0, 0], [0, 1, 2, 2, 2, 1]]).tolist())
        y = x @ np.rint(np.linalg.inv(matrix))
        for o in rare:
            n = grid(y - y[o]) % GRID
            candidates.append((numbers, sorted((rank[t], *p) for t, p in zip(tokens, n.tolist(), strict=True))))
    return min(candidates)


def exact_inverse(matrix: np.ndarray) -> list[list[Fraction]]:
    """The inverse of an integer matrix in exact fractions."""
    d = round(np.linalg.det(matrix))
    adjugate = np.rint(np.linalg.inv(matrix) * d).astype(int)
    return [[Fraction(int(v), d) for v in row] for row in adjugate]
