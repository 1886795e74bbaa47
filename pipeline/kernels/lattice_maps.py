"""All maps of one lattice onto another within a strain, and the reduced basis that bounds the search.

A map takes the basis A of the first lattice to a basis B of the second; its strain is the largest |ln| of the principal
stretches of F in A F = B (rows are vectors). Within strain s every lattice vector x of the first changes its length by
a factor between exp(-s) and exp(s), so (i) the successive minima of the two lattices agree to that factor, and (ii)
each basis vector of A goes to a vector of the second lattice from a thin shell. All vectors of the shells are found in
a box: the i-th coefficient of a vector of length r is at most r times the length of the i-th reciprocal vector.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LENGTH_SLACK = 1e-9
"""Relative slack on every bound of the search, far above rounding and far below any tolerance."""


@inner
def inverse3(m: Floats) -> Floats:
    """Inverse of a (3, 3) float64 matrix by cofactors."""
    out = np.empty((3, 3))
    out[0, 0] = m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1]
    out[0, 1] = m[0, 2] * m[2, 1] - m[0, 1] * m[2, 2]
    out[0, 2] = m[0, 1] * m[1, 2] - m[0, 2] * m[1, 1]
    out[1, 0] = m[1, 2] * m[2, 0] - m[1, 0] * m[2, 2]
    out[1, 1] = m[0, 0] * m[2, 2] - m[0, 2] * m[2, 0]
    out[1, 2] = m[0, 2] * m[1, 0] - m[0, 0] * m[1, 2]
    out[2, 0] = m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0]
    out[2, 1] = m[0, 1] * m[2, 0] - m[0, 0] * m[2, 1]
    out[2, 2] = m[0, 0] * m[1, 1] - m[0, 1] * m[1, 0]
    det = m[0, 0] * out[0, 0] + m[0, 1] * out[1, 0] + m[0, 2] * out[2, 0]
    for i in range(3):
        for j in range(3):
            out[i, j] /= det
    return out


@inner
def product3(a, b):  # type: ignore[no-untyped-def]
    """a @ b of two (3, 3) matrices of one dtype, without a call to BLAS."""
    out = np.zeros((3, 3), a.dtype)
    for i in range(3):
        for j in range(3):
            out[i, j] = a[i, 0] * b[0, j] + a[i, 1] * b[1, j] + a[i, 2] * b[2, j]
    return out


@inner
def determinant3(m):  # type: ignore[no-untyped-def]
    """Determinant of a (3, 3) matrix in its own dtype."""
    return (
        m[0, 0] * (m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1])
        - m[0, 1] * (m[1, 0] * m[2, 2] - m[1, 2] * m[2, 0])
        + m[0, 2] * (m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0])
    )


@inner
def adjugate3(m: Ints) -> Ints:
    """Integer adjugate: m @ adjugate3(m) = det(m) 1."""
    out = np.empty((3, 3), np.int64)
    out[0, 0] = m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1]
    out[0, 1] = m[0, 2] * m[2, 1] - m[0, 1] * m[2, 2]
    out[0, 2] = m[0, 1] * m[1, 2] - m[0, 2] * m[1, 1]
    out[1, 0] = m[1, 2] * m[2, 0] - m[1, 0] * m[2, 2]
    out[1, 1] = m[0, 0] * m[2, 2] - m[0, 2] * m[2, 0]
    out[1, 2] = m[0, 2] * m[1, 0] - m[0, 0] * m[1, 2]
    out[2, 0] = m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0]
    out[2, 1] = m[0, 1] * m[2, 0] - m[0, 0] * m[2, 1]
    out[2, 2] = m[0, 0] * m[1, 1] - m[0, 1] * m[1, 0]
    return out


@inner
def _dot(a: Floats, b: Floats) -> float:
    return float(a[0] * b[0] + a[1] * b[1] + a[2] * b[2])


@inner
def reduced_basis(cell: Floats, planar: bool) -> tuple[Floats, Ints]:
    """A Minkowski-reduced basis R of a lattice and the unimodular T (int64) with R = T @ cell, shortest vector first.

    Greedy reduction in three dimensions: the two shorter vectors are Lagrange-reduced, the longest one is made the
    shortest of its coset by trying the integers around the real minimum; repeated until nothing gets shorter. Such a
    basis attains the successive minima of the lattice (Semaev, Lect. Notes Comput. Sci. 2146, 2001). planar: only the
    first two rows are reduced, and the third is kept.
    """
    basis = cell.copy()
    t = np.zeros((3, 3), np.int64)
    for i in range(3):
        t[i, i] = 1
    size = 2 if planar else 3
    shrink = 1.0 - 1e-10
    for _ in range(1000):
        for i in range(size - 1):  # sort by length, stable
            for j in range(size - 1 - i):
                if _dot(basis[j + 1], basis[j + 1]) < shrink * _dot(basis[j], basis[j]):
                    for k in range(3):
                        basis[j, k], basis[j + 1, k] = basis[j + 1, k], basis[j, k]
                        t[j, k], t[j + 1, k] = t[j + 1, k], t[j, k]
        aa, ab, bb = _dot(basis[0], basis[0]), _dot(basis[0], basis[1]), _dot(basis[1], basis[1])
        n = math.floor(ab / aa + 0.5)
        if n != 0 and bb - 2 * n * ab + n * n * aa < shrink * bb:
            for k in range(3):
                basis[1, k] -= n * basis[0, k]
                t[1, k] -= n * t[0, k]
            continue
        if planar:
            break
        ac, bc, cc = _dot(basis[0], basis[2]), _dot(basis[1], basis[2]), _dot(basis[2], basis[2])
        det = aa * bb - ab * ab
        x = math.floor((ac * bb - bc * ab) / det)
        y = math.floor((bc * aa - ac * ab) / det)
        best, bx, by = shrink * cc, 0, 0
        for p in range(x - 1, x + 3):
            for q in range(y - 1, y + 3):
                length = cc + p * p * aa + q * q * bb - 2 * p * ac - 2 * q * bc + 2 * p * q * ab
                if length < best:
                    best, bx, by = length, p, q
        if bx == 0 and by == 0:
            break
        for k in range(3):
            basis[2, k] -= bx * basis[0, k] + by * basis[1, k]
            t[2, k] -= bx * t[0, k] + by * t[1, k]
    for i in range(3):
        for k in range(3):
            basis[i, k] = t[i, 0] * cell[0, k] + t[i, 1] * cell[1, k] + t[i, 2] * cell[2, k]
    return basis, t


@kernel
def reduced_bases(cells: Floats, planar: NDArray[np.bool_]) -> tuple[Floats, Ints]:
    """`reduced_basis` of every cell (n, 3, 3) of a batch: bases (n, 3, 3) and matrices (n, 3, 3)."""
    bases = np.empty_like(cells)
    t = np.empty(cells.shape, np.int64)
    for i in range(cells.shape[0]):
        basis, matrix = reduced_basis(cells[i], planar[i])
        for j in range(3):
            for k in range(3):
                bases[i, j, k] = basis[j, k]
                t[i, j, k] = matrix[j, k]
    return bases, t


@inner
def log_stretches(first_inverse: Floats, second: Floats) -> tuple[float, float, float]:
    """Logarithms of the principal stretches of F = first_inverse @ second, ascending.

    The eigenvalues of F F^T by Jacobi rotations: exact to rounding also where they are equal, which the closed formula
    for cubic equations is not.
    """
    f = product3(first_inverse, second)
    a = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            a[i, j] = _dot(f[i], f[j])
    for _ in range(12):
        off = abs(a[0, 1]) + abs(a[0, 2]) + abs(a[1, 2])
        if off < 1e-17 * (a[0, 0] + a[1, 1] + a[2, 2]):
            break
        for p in range(2):
            for q in range(p + 1, 3):
                if a[p, q] == 0.0:
                    continue
                theta = (a[q, q] - a[p, p]) / (2.0 * a[p, q])
                sign = 1.0 if theta >= 0 else -1.0
                t = sign / (abs(theta) + math.sqrt(theta * theta + 1.0))
                c = 1.0 / math.sqrt(t * t + 1.0)
                s = t * c
                app, aqq, apq = a[p, p], a[q, q], a[p, q]
                a[p, p] = app - t * apq
                a[q, q] = aqq + t * apq
                a[p, q] = 0.0
                a[q, p] = 0.0
                r = 3 - p - q
                arp, arq = a[r, p], a[r, q]
                a[r, p] = c * arp - s * arq
                a[p, r] = a[r, p]
                a[r, q] = s * arp + c * arq
                a[q, r] = a[r, q]
    x, y, z = 0.5 * math.log(a[0, 0]), 0.5 * math.log(a[1, 1]), 0.5 * math.log(a[2, 2])
    low, high = min(x, y, z), max(x, y, z)
    return low, x + y + z - low - high, high


@inner
def _wider_shells(vectors: Floats, integers: Ints, lengths: Floats) -> tuple[Floats, Ints, Floats]:
    """Copies with room for twice as many vectors in each shell."""
    n = lengths.shape[1]
    more_vectors, more_integers = np.empty((3, 2 * n, 3)), np.empty((3, 2 * n, 3), np.int64)
    more_lengths = np.empty((3, 2 * n))
    for i in range(3):
        for k in range(n):
            more_lengths[i, k] = lengths[i, k]
            for m in range(3):
                more_vectors[i, k, m] = vectors[i, k, m]
                more_integers[i, k, m] = integers[i, k, m]
    return more_vectors, more_integers, more_lengths


@inner
def _wider_maps(maps: Ints, strains: Floats) -> tuple[Ints, Floats]:
    """Copies with room for twice as many maps."""
    n = strains.shape[0]
    more_maps, more_strains = np.empty((2 * n, 3, 3), np.int64), np.empty(2 * n)
    for k in range(n):
        more_strains[k] = strains[k]
        for i in range(3):
            for j in range(3):
                more_maps[k, i, j] = maps[k, i, j]
    return more_maps, more_strains


@inner
def lattice_maps(first: Floats, second: Floats, limit: float, planar: bool) -> tuple[int, Ints, Floats]:
    """All integer U with det U = +-1 such that `first` -> U @ second has a strain of at most `limit`.

    first, second (3, 3): reduced bases (reduced_basis). Returns their number, U (capacity, 3, 3) int64 and strains
    (capacity,), in a fixed order: of the box, first row slowest. planar: the third vectors, perpendicular to the
    planes, map onto each other and the planes onto themselves.
    """
    none = np.empty((1, 3, 3), np.int64)
    up = math.exp(2.0 * limit) * (1.0 + LENGTH_SLACK)
    down = 1.0 / up
    norms = np.empty(3)
    for i in range(3):
        norms[i] = _dot(first[i], first[i])
        ratio = _dot(second[i], second[i]) / norms[i]
        if ratio > up or ratio < down:  # successive minima
            return 0, none, np.empty(1)
    inverse = inverse3(second)
    reach = math.sqrt(up * (max(norms[0], norms[1]) if planar else max(norms[0], norms[1], norms[2])))
    box = np.empty(3, np.int64)
    for i in range(3):
        column = math.sqrt(inverse[0, i] ** 2 + inverse[1, i] ** 2 + inverse[2, i] ** 2)
        box[i] = math.floor(reach * column * (1.0 + LENGTH_SLACK))
    if planar:
        box[2] = 0
    size = 64
    vectors = np.empty((3, size, 3))
    integers = np.empty((3, size, 3), np.int64)
    lengths = np.empty((3, size))
    counts = np.zeros(3, np.int64)
    for n0 in range(-box[0], box[0] + 1):
        for n1 in range(-box[1], box[1] + 1):
            x = n0 * second[0, 0] + n1 * second[1, 0]
            y = n0 * second[0, 1] + n1 * second[1, 1]
            z = n0 * second[0, 2] + n1 * second[1, 2]
            for n2 in range(-box[2], box[2] + 1):
                v0, v1, v2 = x + n2 * second[2, 0], y + n2 * second[2, 1], z + n2 * second[2, 2]
                length = v0 * v0 + v1 * v1 + v2 * v2
                for i in range(3):
                    if length < down * norms[i] or length > up * norms[i]:
                        continue
                    if planar and i == 2:
                        continue
                    if counts[i] == size:
                        vectors, integers, lengths = _wider_shells(vectors, integers, lengths)
                        size *= 2
                    k = counts[i]
                    vectors[i, k, 0], vectors[i, k, 1], vectors[i, k, 2] = v0, v1, v2
                    integers[i, k, 0], integers[i, k, 1], integers[i, k, 2] = n0, n1, n2
                    lengths[i, k] = length
                    counts[i] += 1
    if planar:
        for k in range(2):
            integers[2, k] = 0
            integers[2, k, 2] = 2 * k - 1
            for m in range(3):
                vectors[2, k, m] = (2 * k - 1) * second[2, m]
            lengths[2, k] = _dot(second[2], second[2])
        counts[2] = 2
    if counts[0] == 0 or counts[1] == 0 or counts[2] == 0:
        return 0, none, np.empty(1)
    # |a_i + a_j|^2 and |a_i - a_j|^2 change by the same factors; both intervals bound the product b_i . b_j.
    d01, d02, d12 = _dot(first[0], first[1]), _dot(first[0], first[2]), _dot(first[1], first[2])
    first_inverse = inverse3(first)
    capacity = 64
    found = np.empty((capacity, 3, 3), np.int64)
    strains = np.empty(capacity)
    u = np.empty((3, 3), np.int64)
    image = np.empty((3, 3))
    total = 0
    for i in range(counts[0]):
        for j in range(counts[1]):
            p01 = _dot(vectors[0, i], vectors[1, j])
            s = lengths[0, i] + lengths[1, j]
            t = norms[0] + norms[1]
            if s + 2 * p01 > up * (t + 2 * d01) or s + 2 * p01 < down * (t + 2 * d01):
                continue
            if s - 2 * p01 > up * (t - 2 * d01) or s - 2 * p01 < down * (t - 2 * d01):
                continue
            for k in range(counts[2]):
                p02 = _dot(vectors[0, i], vectors[2, k])
                s = lengths[0, i] + lengths[2, k]
                t = norms[0] + norms[2]
                if s + 2 * p02 > up * (t + 2 * d02) or s + 2 * p02 < down * (t + 2 * d02):
                    continue
                if s - 2 * p02 > up * (t - 2 * d02) or s - 2 * p02 < down * (t - 2 * d02):
                    continue
                p12 = _dot(vectors[1, j], vectors[2, k])
                s = lengths[1, j] + lengths[2, k]
                t = norms[1] + norms[2]
                if s + 2 * p12 > up * (t + 2 * d12) or s + 2 * p12 < down * (t + 2 * d12):
                    continue
                if s - 2 * p12 > up * (t - 2 * d12) or s - 2 * p12 < down * (t - 2 * d12):
                    continue
                for m in range(3):
                    u[0, m], u[1, m], u[2, m] = integers[0, i, m], integers[1, j, m], integers[2, k, m]
                    image[0, m], image[1, m], image[2, m] = vectors[0, i, m], vectors[1, j, m], vectors[2, k, m]
                if abs(determinant3(u)) != 1:
                    continue
                low, _, high = log_stretches(first_inverse, image)
                strain = max(-low, high)
                if strain > limit + LENGTH_SLACK:
                    continue
                if total == capacity:
                    found, strains = _wider_maps(found, strains)
                    capacity *= 2
                for m in range(3):
                    for n in range(3):
                        found[total, m, n] = u[m, n]
                strains[total] = strain
                total += 1
    return total, found, strains


def warm_up() -> None:
    """Compile the kernel that is called from Python."""
    reduced_bases(np.eye(3)[None], np.zeros(1, np.bool_))
