"""Disguises of invented crystals by number of the record, compiled."""

from __future__ import annotations

import itertools

import numpy as np

from lattice_census.kernels.compiled import inner

from .numbered_draws import DISGUISE, draw, state

MOST_GIVEN = 120
"""Sites of a given cell: larger supercells are not made."""


def _unimodular() -> np.ndarray:
    """Integer matrices of determinant 1 with entries of at most 2: steps and turns from the unit matrix."""
    rng = np.random.default_rng(20)
    out = []
    while len(out) < 64:
        m = np.eye(3, dtype=np.int64)[rng.permutation(3)] * rng.choice([-1, 1], 3)
        for _ in range(rng.integers(1, 6)):
            i, j = rng.permutation(3)[:2]
            m[i] += rng.choice([-1, 1]) * m[j]
        if abs(m).max() <= 2 and round(np.linalg.det(m)) == 1:
            out.append(m)
    return np.array(out)


def _sublattices(index: int) -> np.ndarray:
    """All row Hermite normal forms of a determinant."""
    out = []
    for a, b in itertools.product(range(1, index + 1), repeat=2):
        if index % (a * b) == 0:
            c = index // (a * b)
            out += [[[a, p, q], [0, b, r], [0, 0, c]] for p in range(b) for q in range(c) for r in range(c)]
    return np.array(out, np.int64)


UNIMODULAR = _unimodular().astype(np.float64)
SUBLATTICES = np.concatenate([_sublattices(i) for i in range(1, 5)]).astype(np.float64)
STARTS = np.cumsum([0] + [len(_sublattices(i)) for i in range(1, 5)])


@inner
def _product(a, b):
    """a (3, 3) times b (3, 3)."""
    out = np.zeros((3, 3))
    for i in range(3):
        for j in range(3):
            for k in range(3):
                out[i, j] += a[i, k] * b[k, j]
    return out


@inner
def _determinant(m):
    return (
        m[0, 0] * (m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1])
        - m[0, 1] * (m[1, 0] * m[2, 2] - m[1, 2] * m[2, 0])
        + m[0, 2] * (m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0])
    )


@inner
def _inverse(m):
    out = np.empty((3, 3))
    scale = 1.0 / _determinant(m)
    for i in range(3):
        for j in range(3):
            a, b, c, d = (j + 1) % 3, (j + 2) % 3, (i + 1) % 3, (i + 2) % 3
            out[i, j] = (m[a, c] * m[b, d] - m[a, d] * m[b, c]) * scale
    return out


@inner
def _rotation(s):
    """A random rotation, from a random unit quaternion (Shoemake, Graphics Gems III, 1992)."""
    u, v, w = draw(s), 2 * np.pi * draw(s), 2 * np.pi * draw(s)
    x, y = np.sqrt(1 - u) * np.sin(v), np.sqrt(1 - u) * np.cos(v)
    z, t = np.sqrt(u) * np.sin(w), np.sqrt(u) * np.cos(w)
    r = np.empty((3, 3))
    r[0, 0], r[0, 1], r[0, 2] = 1 - 2 * (y * y + z * z), 2 * (x * y - z * t), 2 * (x * z + y * t)
    r[1, 0], r[1, 1], r[1, 2] = 2 * (x * y + z * t), 1 - 2 * (x * x + z * z), 2 * (y * z - x * t)
    r[2, 0], r[2, 1], r[2, 2] = 2 * (x * z - y * t), 2 * (y * z + x * t), 1 - 2 * (x * x + y * y)
    return r


@inner
def _basis(s, cell, index, unimodular, sublattices, starts):
    """(matrix, Hermite form) of a random basis with `index` times the volume: not flatter than V/(abc) = 0.1 if that is
    found."""
    for _ in range(20):
        h = sublattices[starts[index - 1] + int(draw(s) * (starts[index] - starts[index - 1]))]
        m = _product(unimodular[int(draw(s) * len(unimodular))], h)
        new = _product(m, cell)
        box = 1.0
        for i in range(3):
            box *= np.sqrt(new[i, 0] ** 2 + new[i, 1] ** 2 + new[i, 2] ** 2)
        if _determinant(new) > 0.1 * box:
            break
    return m, h


@inner
def _shake(s, noise, positions, cell):
    """Move every site, and return the strained cell."""
    inverse = _inverse(cell)
    for i in range(len(positions)):
        while True:
            a, b, c = 2 * draw(s) - 1, 2 * draw(s) - 1, 2 * draw(s) - 1
            if a * a + b * b + c * c <= 1:
                break
        for k in range(3):
            positions[i, k] += noise * (a * inverse[0, k] + b * inverse[1, k] + c * inverse[2, k])
    stretch, strain = np.zeros((3, 3)), 0.1 * noise
    for i in range(3):
        # Gershgorin: an eigenvalue is no larger than a row's sum of sizes, 0.95 of the limit.
        stretch[i, i] = 1 + 0.57 * strain * (2 * draw(s) - 1)
        for j in range(i):
            stretch[i, j] = stretch[j, i] = 0.19 * strain * (2 * draw(s) - 1)
    return _product(cell, stretch)


@inner
def disguise(seed, record, largest_noise, cell, positions, species, unimodular, sublattices, starts):
    """A crystal under another basis, origin, order and orientation, as a supercell of up to 4, mirrored or not.

    Four in ten are exact; else each site moves by up to half of or the whole of largest_noise (angstrom, evenly in the
    ball), and the cell is strained by up to a tenth of that number. Returns (cell, positions, species, index, noise,
    mirrored).
    """
    s = state(seed, DISGUISE, record)
    u = draw(s)
    noise = 0.0 if u < 0.4 else 0.5 * largest_noise if u < 0.7 else largest_noise
    u = draw(s)
    index = 1 if u < 0.6 else 2 if u < 0.8 else 3 if u < 0.9 else 4
    if index * len(positions) > MOST_GIVEN:
        index = 1
    mirrored = draw(s) < 0.5
    m, h = _basis(s, cell, index, unimodular, sublattices, starts)
    back, new = _inverse(m), _product(m, cell)
    n = len(positions)
    out, kinds, order = np.empty((index * n, 3)), np.empty(index * n, np.int32), np.arange(index * n)
    for i in range(index * n - 1, 0, -1):
        j = int(draw(s) * (i + 1))
        order[i], order[j] = order[j], order[i]
    origin = (draw(s), draw(s), draw(s))
    sign = -1.0 if mirrored else 1.0
    place = 0
    # The rows of a Hermite form span a lattice of which these are all cosets.
    for t0 in range(int(h[0, 0])):
        for t1 in range(int(h[1, 1])):
            for t2 in range(int(h[2, 2])):
                for i in range(n):
                    a, b, c = sign * positions[i, 0] + t0, sign * positions[i, 1] + t1, sign * positions[i, 2] + t2
                    for k in range(3):
                        out[order[place], k] = a * back[0, k] + b * back[1, k] + c * back[2, k] + origin[k]
                    kinds[order[place]] = species[i]
                    place += 1
    if noise > 0:
        new = _shake(s, noise, out, new)
    for i in range(index * n):
        for k in range(3):
            out[i, k] -= np.floor(out[i, k])
    return _product(new, _rotation(s)), out, kinds, index, noise, mirrored
