"""A plain twin of the key of layers: all reduced plane bases, all origins, heights in angstrom; NumPy and loops alone.

It shares neither code nor conventions with the package: positions are rounded, so that it is good for layers whose
numbers are far from the edges of the rounding, which the tests draw.
"""

from __future__ import annotations

import itertools

import numpy as np

DIGITS = 4


def short_vectors(plane: np.ndarray) -> list[np.ndarray]:
    """Lattice vectors of a short basis with coefficients up to 2."""
    a, b = plane
    while True:
        if b @ b < a @ a:
            a, b = b, a
        n = round(float(a @ b / (a @ a)))
        if n == 0:
            break
        b = b - n * a
    return [i * a + j * b for i, j in itertools.product(range(-2, 3), repeat=2) if (i, j) != (0, 0)]


def slow_key(cell: np.ndarray, positions: np.ndarray, tokens: list[str]) -> tuple:
    """Equal for primitive layers that a proper motion brings onto each other; the slab in one piece, at any angle."""
    normal = np.cross(cell[0], cell[1])
    area = np.linalg.norm(normal)
    normal /= area
    first = cell[0] / np.linalg.norm(cell[0])
    frame = np.array([first, np.cross(normal, first), normal])
    x = np.asarray(positions, float).copy()
    order = np.sort(x[:, 2] % 1)
    gaps = np.append(order[1:], order[0] + 1) - order
    cut = order[gaps.argmax()] + gaps.max() / 2
    x[:, 2] -= np.floor(x[:, 2] - cut)
    place = x @ cell @ frame.T
    vectors = short_vectors((cell @ frame.T)[:2, :2])
    shortest = min(v @ v for v in vectors)
    best = None
    for up in (1.0, -1.0):
        turn = np.diag([1.0, up, up])
        flat = [v @ turn[:2, :2] for v in vectors]
        for a, b in itertools.product(flat, repeat=2):
            det = a[0] * b[1] - a[1] * b[0]
            if abs(a @ a - shortest) > 1e-6 or abs(det - area) > 1e-6 * area or not -1e-6 <= -2 * a @ b <= a @ a + 1e-6:
                continue
            if any(abs(c[0] * a[1] - c[1] * a[0]) > 1e-6 and c @ c < b @ b - 1e-6 for c in flat):
                continue
            inverse = np.linalg.inv(np.array([a, b]))
            p = place @ turn
            for o in p:
                at = (p - o)[:, :2] @ inverse
                at = np.round(at + 3e-5, DIGITS) % 1
                rows = sorted(zip(tokens, *np.round(at, DIGITS).T, np.round((p - o)[:, 2] + 3e-5, DIGITS), strict=True))
                metric = tuple(np.round([a @ a + 3e-5, a @ b + 3e-5, b @ b + 3e-5], DIGITS))
                candidate = (metric, tuple((t, float(u), float(v), float(w)) for t, u, v, w in rows))
                if best is None or candidate < best:
                    best = candidate
    assert best is not None
    return best
