"""One crystal under many descriptions: cells, origins, orders, orientations, supercells, mirror images, noise.

A crystal here is the triple (cell (3, 3), positions (n, 3), tokens, a list of n); rows are vectors, angstrom, positions
are fractional. All arithmetic is elementwise, so that it gives the same bits on every machine (a library's matrix
product may not). The tests use these disguises too.
"""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np

from ..model.batch import Floats
from .draws import Chance

Crystal = tuple[Floats, Floats, list[str]]
Matrix = np.ndarray[Any, np.dtype[np.int64]]


def product(rows: Any, matrix: Any) -> Floats:
    """rows (n, 3) times matrix (3, 3), the three terms added in order."""
    a, m = np.asarray(rows, np.float64), np.asarray(matrix, np.float64)
    out: Floats = (a[:, 0:1] * m[0] + a[:, 1:2] * m[1]) + a[:, 2:3] * m[2]
    return out


def adjugate(matrix: Any) -> Any:
    """(3, 3) transposed cofactors: matrix times this is the determinant times the unit matrix."""
    m = np.asarray(matrix)
    cofactors = [
        [
            m[(i + 1) % 3, (j + 1) % 3] * m[(i + 2) % 3, (j + 2) % 3]
            - m[(i + 1) % 3, (j + 2) % 3] * m[(i + 2) % 3, (j + 1) % 3]
            for j in range(3)
        ]
        for i in range(3)
    ]
    return np.array(cofactors).T


def determinant(matrix: Any) -> Any:
    """Determinant of a (3, 3) matrix; an integer for integers."""
    m, adj = np.asarray(matrix), adjugate(matrix)
    return (m[0, 0] * adj[0, 0] + m[0, 1] * adj[1, 0]) + m[0, 2] * adj[2, 0]


def inverse(matrix: Any) -> Floats:
    """Inverse of a (3, 3) matrix."""
    out: Floats = adjugate(matrix) / determinant(matrix)
    return out


def unimodular(rng: Chance, largest: int = 5, sign: int | None = None) -> Matrix:
    """A random integer matrix of determinant +-1 (or `sign`) with entries up to `largest`."""
    while True:
        m: Matrix = np.eye(3, dtype=int)[rng.permutation(3)] * rng.choice([-1, 1], 3)
        for _ in range(rng.integers(1, 8)):
            i, j = rng.permutation(3)[:2]
            m[i] += rng.integers(-2, 3) * m[j]
        if abs(m).max() <= largest and (sign is None or int(determinant(m)) == sign):
            return m


def hermite_matrices(index: int) -> list[Matrix]:
    """All row Hermite normal forms of a determinant: one a superlattice."""
    out = []
    for a in range(1, index + 1):
        for b in range(1, index // a + 1):
            if index % (a * b) == 0:
                c = index // (a * b)
                for p, q, r in itertools.product(range(b), range(c), range(c)):
                    out.append(np.array([[a, p, q], [0, b, r], [0, 0, c]]))
    return out


def supercell(crystal: Crystal, matrix: Any) -> Crystal:
    """The same crystal in the cell matrix @ cell, with |det| times the sites."""
    cell, positions, tokens = crystal
    matrix = np.asarray(matrix, np.int64)
    volume = int(determinant(matrix))
    n = abs(volume)
    adj = [[int(x) * (1 if volume > 0 else -1) for x in row] for row in adjugate(matrix).tolist()]
    reach = abs(matrix).sum(axis=0).tolist()
    # A translation of the old lattice in the new basis is (shift @ adjugate) / det: distinct residues, distinct images.
    found: dict[tuple[int, ...], None] = {}
    for s in itertools.product(*(range(-r, r + 1) for r in reach)):
        found.setdefault(tuple((s[0] * adj[0][k] + s[1] * adj[1][k] + s[2] * adj[2][k]) % n for k in range(3)))
        if len(found) == n:
            break
    assert len(found) == n
    new = product(positions, inverse(matrix))[:, None] + np.array(list(found), np.float64)[None] / n
    return product(matrix, cell), new.reshape(-1, 3), [t for t in tokens for _ in range(n)]


def rotation(rng: Chance) -> Floats:
    """A random proper rotation; row vectors are turned by v @ R. Columns by Gram & Schmidt from random ones."""
    columns = rng.normal(size=(3, 3)).T
    found: list[Floats] = []
    for c in columns:
        for u in found:
            c = c - _dot(c, u) * u
        found.append(c / np.sqrt(_dot(c, c)))
    q: Floats = np.array(found).T
    return q if determinant(q) > 0 else -q


def _dot(a: Floats, b: Floats) -> Any:
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


def mirror(crystal: Crystal) -> Crystal:
    """The mirror image (inverted through the origin)."""
    cell, positions, tokens = crystal
    return cell, -positions, list(tokens)


def moved(rng: Chance, crystal: Crystal) -> Crystal:
    """The same crystal at another origin, with its sites in another order, inside the cell."""
    cell, positions, tokens = crystal
    positions = positions + rng.random(3)
    order = rng.permutation(len(tokens))
    return cell, _wrapped(positions[order]), [tokens[i] for i in order]


def turned(rng: Chance, crystal: Crystal) -> Crystal:
    """The same crystal in another orientation."""
    cell, positions, tokens = crystal
    return product(cell, rotation(rng)), positions, tokens


def shaken(rng: Chance, crystal: Crystal, noise: float) -> Crystal:
    """Every site moved by a vector of length up to `noise` (angstrom)."""
    cell, positions, tokens = crystal
    steps = rng.normal(size=positions.shape)
    lengths = np.sqrt((steps[:, 0] ** 2 + steps[:, 1] ** 2) + steps[:, 2] ** 2)[:, None]
    steps = steps / lengths * (noise * rng.random((len(steps), 1)))
    return cell, positions + product(steps, inverse(cell)), tokens


def strained(rng: Chance, crystal: Crystal, strain: float) -> Crystal:
    """The cell stretched by a random symmetric tensor whose logarithmic stretches stay within `strain` (small)."""
    cell, positions, tokens = crystal
    # Gershgorin: an eigenvalue is no larger than a row's sum of sizes, 0.95 of the limit; the logarithm adds less.
    x = 2 * rng.random(6) - 1
    on, off = 0.57 * strain * x[:3], 0.19 * strain * x[3:]
    stretch = np.array([[1 + on[0], off[0], off[1]], [off[0], 1 + on[1], off[2]], [off[1], off[2], 1 + on[2]]])
    return product(cell, stretch), positions, tokens


def scaled(crystal: Crystal, factor: float) -> Crystal:
    """All edges longer by one factor."""
    cell, positions, tokens = crystal
    return cell * factor, positions, tokens


def right_handed(crystal: Crystal) -> Crystal:
    """The same crystal in a right-handed basis: a left-handed one is turned round with its positions."""
    cell, positions, tokens = crystal
    return crystal if determinant(cell) > 0 else (-cell, _wrapped(-positions), tokens)


def flatness(cell: Floats) -> float:
    """V/(abc), 1 for a right-angled cell."""
    edges = np.sqrt((cell[:, 0] ** 2 + cell[:, 1] ** 2) + cell[:, 2] ** 2)
    return float(abs(determinant(cell)) / (edges[0] * edges[1] * edges[2]))


def another_cell(rng: Chance, crystal: Crystal, index: int, largest: int = 3) -> Crystal:
    """A primitive crystal in a random cell with `index` times its sites, not flatter than V/(abc) = 0.05."""
    matrices = hermite_matrices(index)
    while True:
        matrix = np.array(unimodular(rng, largest)) @ matrices[rng.integers(0, len(matrices))]
        if abs(matrix).max() <= 12 and flatness(product(matrix, crystal[0])) > 0.05:
            return supercell(crystal, matrix)


def _wrapped(positions: Floats) -> Floats:
    out: Floats = positions - np.floor(positions)
    return out
