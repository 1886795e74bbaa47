"""From the axes of a holohedry to the conventional cell in its standard setting, as an integer matrix.

The settings are those of lattice.bravais.CONVENTIONAL_SETTING; the matrix C turns the given basis into conventional =
C @ given, with determinant 1, 2, 3 or 4 (positive: handedness is kept).
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner
from .holohedry import AP, FAMILY, HR, MP, MS, OS, determinant
from .lattice_strain import CUBIC, ORTHORHOMBIC


@inner
def _product(metric: Floats, p: Ints, q: Ints) -> float:
    """Scalar product of two integer vectors."""
    s = 0.0
    for i in range(3):
        for j in range(3):
            s += p[i] * metric[i, j] * q[j]
    return s


@inner
def _swap(frame: Ints, i: int, j: int) -> None:
    for m in range(3):
        frame[i, m], frame[j, m] = frame[j, m], frame[i, m]


@inner
def _plane_basis(normal: Ints, p: Ints, q: Ints) -> None:
    """A basis p, q of the lattice plane u.v = 0 of a primitive u = (a, b, c): with g = gcd(a, b) = a x + b y it is
    (b/g, -a/g, 0) and (-c x, -c y, g)."""
    a, b, c = normal[0], normal[1], normal[2]
    if a == 0 and b == 0:
        p[0], p[1], p[2] = 1, 0, 0
        q[0], q[1], q[2] = 0, 1, 0
        return
    # Extended Euclid.
    r0, r1, x0, x1, y0, y1 = a, b, 1, 0, 0, 1
    while r1:
        n = r0 // r1
        r0, r1 = r1, r0 - n * r1
        x0, x1 = x1, x0 - n * x1
        y0, y1 = y1, y0 - n * y1
    p[0], p[1], p[2] = b // r0, -a // r0, 0
    q[0], q[1], q[2] = -c * x0, -c * y0, r0


@inner
def _shorten_plane(metric: Floats, p: Ints, q: Ints) -> None:
    """Gauss reduction of a plane basis in place: p the shortest, q the next, their angle not acute."""
    while True:
        if _product(metric, q, q) < _product(metric, p, p):
            for m in range(3):
                p[m], q[m] = q[m], p[m]
        n = int(np.floor(_product(metric, p, q) / _product(metric, p, p) + 0.5))
        if n == 0:
            break
        before = _product(metric, q, q)
        for m in range(3):
            q[m] -= n * p[m]
        if _product(metric, q, q) >= before * (1 - 1e-12):
            break
    if _product(metric, p, q) > 0:
        for m in range(3):
            q[m] = -q[m]


@inner
def _monoclinic(metric: Floats, axis: Ints, normal: Ints, centred: bool, out: Ints) -> None:
    """b along the axis; a and c in the plane normal to it, beta >= 90 degrees.

    For u.t = 2 half of b plus half of a plane vector h is a lattice point, h one of p, q, p + q modulo twice the plane
    lattice: a must be of the class of h for the C face to be centred, and c completes it to a basis of the plane.
    """
    p, q = np.empty(3, np.int64), np.empty(3, np.int64)
    _plane_basis(normal, p, q)
    _shorten_plane(metric, p, q)
    if centred:
        even_p, even_q = True, True
        for m in range(3):
            even_p = even_p and (axis[m] + p[m]) % 2 == 0
            even_q = even_q and (axis[m] + q[m]) % 2 == 0
        if even_q:
            for m in range(3):
                p[m], q[m] = q[m], p[m]
        elif not even_p:
            # The angle of p and q is not acute: p + q is the shortest of its class, p the shortest that completes it.
            for m in range(3):
                p[m], q[m] = p[m] + q[m], p[m]
    # For a fixed a the shortest c is c - n a, but a centred a allows every n; q is the shortest already unless a is p
    # + q.
    n = int(np.floor(_product(metric, p, q) / _product(metric, p, p) + 0.5))
    for m in range(3):
        q[m] -= n * p[m]
    if _product(metric, p, q) > 0:
        for m in range(3):
            q[m] = -q[m]
    for m in range(3):
        out[0, m], out[1, m], out[2, m] = p[m], axis[m], q[m]
    if determinant(out) < 0:
        for m in range(3):
            out[1, m] = -axis[m]


@inner
def _order_by_length(metric: Floats, out: Ints, n: int) -> None:
    """The first n rows by ascending length."""
    for i in range(n - 1):
        for j in range(n - 1 - i):
            if _product(metric, out[j], out[j]) > _product(metric, out[j + 1], out[j + 1]):
                _swap(out, j, j + 1)


@inner
def _half_sum(out: Ints, i: int, j: int) -> bool:
    """Whether half the sum of two rows is a lattice vector."""
    even = True
    for m in range(3):
        even = even and (out[i, m] + out[j, m]) % 2 == 0
    return even


@inner
def conventional_matrix(kind: int, frame: Ints, metric: Floats, out: Ints) -> None:
    """Fill `out` (3, 3) int64 with C for the type `kind` (code) from its frame (3, 3) int64 of `nearest_types`.

    metric: (3, 3) float64 of the basis that the frame refers to.
    """
    for i in range(3):
        for j in range(3):
            out[i, j] = frame[i, j] if kind != AP else (1 if i == j else 0)
    if kind == AP:
        return
    if kind in (MP, MS):
        _monoclinic(metric, frame[0], frame[1], kind == MS, out)
        return
    if kind == OS:
        # The centred face becomes the C face: the row that is in no half sum goes last.
        last = 2
        for m in range(3):
            if _half_sum(out, (m + 1) % 3, (m + 2) % 3):
                last = m
        _swap(out, last, 2)
    if FAMILY[kind] == ORTHORHOMBIC or FAMILY[kind] == CUBIC:
        _order_by_length(metric, out, 2 if kind == OS else 3)
        if determinant(out) < 0:
            for m in range(3):
                out[1, m] = -out[1, m]
        return
    # Tetragonal and hexagonal: exchanging a and b keeps gamma.
    if determinant(out) < 0:
        _swap(out, 0, 1)
    if kind == HR:
        obverse = True
        for m in range(3):
            obverse = obverse and (2 * out[0, m] + out[1, m] + out[2, m]) % 3 == 0
        if not obverse:
            # Half a turn about c: reverse to obverse.
            for i in range(2):
                for m in range(3):
                    out[i, m] = -out[i, m]
