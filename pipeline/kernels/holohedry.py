"""From two-fold axes to every holohedry that a lattice has or nearly has, each with its strain.

Two two-fold rotations of a lattice make a rotation by twice the angle between their axes. With (t, u, k) of each axis
(automorphisms.py), q = (u1.t2)(u2.t1)/(k1 k2) is the squared cosine of that angle in every lattice that has both, and
the trace of the product is 4q - 1: the product has finite order if and only if q is 1/4 (order 3), 1/2 (4), 3/4 (6),
or 0 with both factors 0 (2). A finite group of integer matrices leaves some metric alone, so nothing but these
integers need be asked. The holohedries:

    mP mS           one axis (k = 1, 2)
    oP oS oI oF     three axes at right angles
    tP tI           four axes in a plane at 45 degrees, and their common normal
    hR, hP          three axes in a plane at 60 degrees; with the common normal they span the hR lattice to one third
                    and the hP lattice wholly (hP has three more axes, along which the span is one third too, but
                    centred in the plane: passed over, the first three have the same strain)
    cP cI cF        two tetragonal groups with three common axes, each normal to the other two

A span of axis vectors of determinant d holds 1/d of the lattice points; which centring that is follows from d and from
the coordinates of a lattice point. Every axis of a holohedry within reach is in the list, so a group that wants an axis
outside it is skipped.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner
from .lattice_strain import CUBIC, HEXAGONAL, ORTHORHOMBIC, TETRAGONAL, family_strain

# Codes: index in lattice.bravais.LATTICE_TYPES (a test compares).
AP, MP, MS, OP, OS, OI, OF, TP, TI, HR, HP, CP, CI, CF = range(14)

FAMILY = np.array([-1, -1, -1] + [ORTHORHOMBIC] * 4 + [TETRAGONAL] * 2 + [HEXAGONAL] * 2 + [CUBIC] * 3, np.int64)
"""Family of each code, for lattice_strain.py."""

MAX_TETRAGONAL = 64
"""Rows for tetragonal groups: cubic lattices have 3."""


@inner
def determinant(m: Ints) -> int:
    """Determinant of an integer (3, 3)."""
    return int(
        m[0, 0] * (m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1])
        - m[0, 1] * (m[1, 0] * m[2, 2] - m[1, 2] * m[2, 0])
        + m[0, 2] * (m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0])
    )


@inner
def _find_axis(axes: Ints, n: int, t: Ints, u: Ints) -> int:
    """The row of the axis with vector +-t and normal +-u, or -1."""
    for i in range(n):
        sign = 1 if axes[i, 0] == t[0] and axes[i, 1] == t[1] and axes[i, 2] == t[2] else -1
        same = True
        for m in range(3):
            same = same and axes[i, m] == sign * t[m]
        if same:
            plus, minus = True, True
            for m in range(3):
                plus = plus and axes[i, 3 + m] == u[m]
                minus = minus and axes[i, 3 + m] == -u[m]
            if plus or minus:
                return i
    return -1


@inner
def _normal_to_both(axes: Ints, i: int, j: int, first: int, out: Ints) -> None:
    """The primitive integer vector along t_i x t_j (first = 0; reciprocal), or along u_i x u_j (first = 3; direct)."""
    x = axes[i, first + 1] * axes[j, first + 2] - axes[i, first + 2] * axes[j, first + 1]
    y = axes[i, first + 2] * axes[j, first] - axes[i, first] * axes[j, first + 2]
    z = axes[i, first] * axes[j, first + 1] - axes[i, first + 1] * axes[j, first]
    a, b = abs(x), abs(y)
    while b:
        a, b = b, a % b
    b = abs(z)
    while b:
        a, b = b, a % b
    out[0], out[1], out[2] = x // a, y // a, z // a


@inner
def _dot(axes: Ints, i: int, j: int) -> int:
    """u_i.t_j."""
    return int(axes[i, 3] * axes[j, 0] + axes[i, 4] * axes[j, 1] + axes[i, 5] * axes[j, 2])


@inner
def _turned(axes: Ints, i: int, j: int, t: Ints, u: Ints) -> None:
    """Axis j turned by the rotation about axis i: t' = -t + 2 t_i (u_i.t)/k_i, u' = -u + 2 u_i (u.t_i)/k_i."""
    f = 2 * _dot(axes, i, j)
    g = 2 * _dot(axes, j, i)
    for m in range(3):
        t[m] = f * axes[i, m] // axes[i, 6] - axes[j, m]
        u[m] = g * axes[i, 3 + m] // axes[i, 6] - axes[j, 3 + m]


@inner
def _offer(kind: int, frame: Ints, metric: Floats, strains: Floats, frames: Ints, work: Floats) -> None:
    """Take the frame (3, 3 integer rows) as the best of its type so far if its strain is the least."""
    c = work[0]
    for i in range(3):
        for j in range(i, 3):
            s = 0.0
            for p in range(3):
                for q in range(3):
                    s += frame[i, p] * metric[p, q] * frame[j, q]
            c[i, j] = c[j, i] = s
    strain = family_strain(c, FAMILY[kind], work[1], work[2])
    if strain < strains[kind]:
        strains[kind] = strain
        for i in range(3):
            for j in range(3):
                frames[kind, i, j] = frame[i, j]


@inner
def _orthorhombic_kind(frame: Ints) -> int:
    """Centring from three axis vectors at right angles."""
    d = abs(determinant(frame))
    if d == 1:
        return OP
    if d == 4:
        return OF
    # d = 2: I if half the sum of the three is a lattice vector, else the sum of some two.
    for j in range(3):
        if (frame[0, j] + frame[1, j] + frame[2, j]) % 2:
            return OS
    return OI


@inner
def _set_rows(frame: Ints, axes: Ints, i: int, j: int, last: Ints) -> None:
    """Rows t_i, t_j and `last`."""
    for m in range(3):
        frame[0, m], frame[1, m], frame[2, m] = axes[i, m], axes[j, m], last[m]


@inner
def nearest_types(metric: Floats, n: int, axes: Ints, axis_strains: Floats, strains: Floats, frames: Ints) -> bool:
    """Least strain to each of the 14 types among the holohedries that the n axes allow, and the axes that give it.

    metric: (3, 3) float64. axes, axis_strains: as filled by `two_fold_axes`. strains: (14,) float64, filled; infinity
    where no group was found, 0 for aP. frames: (14, 3, 3) int64, rows in the lattice basis: three axes (mP, mS: row 0
    the axis, row 1 its normal in the reciprocal basis; hR, hP, tP, tI: row 2 the main axis). Returns False where
    there are too many tetragonal groups to hold: ask again with fewer axes.
    """
    work = np.empty((3, 3, 3))
    t = np.empty(3, np.int64)
    u = np.empty(3, np.int64)
    main = np.empty(3, np.int64)
    normal = np.empty(3, np.int64)
    frame = np.empty((3, 3), np.int64)
    other = np.empty((3, 3), np.int64)
    tetragonal = np.empty((MAX_TETRAGONAL, 5), np.int64)
    found = 0
    strains[:] = np.inf
    strains[AP] = 0.0
    for i in range(n):
        kind = MP if axes[i, 6] == 1 else MS
        if axis_strains[i] < strains[kind]:
            strains[kind] = axis_strains[i]
            for m in range(3):
                frames[kind, 0, m], frames[kind, 1, m] = axes[i, m], axes[i, 3 + m]
    for i in range(n):
        for j in range(i + 1, n):
            f = _dot(axes, i, j)
            g = _dot(axes, j, i)
            if f == 0 and g == 0:
                _normal_to_both(axes, i, j, 3, main)
                _normal_to_both(axes, i, j, 0, normal)
                if _find_axis(axes, n, main, normal) > j:
                    _set_rows(frame, axes, i, j, main)
                    _offer(_orthorhombic_kind(frame), frame, metric, strains, frames, work)
                continue
            q, k = 4 * f * g, axes[i, 6] * axes[j, 6]
            if q == k:
                _turned(axes, i, j, t, u)
                if _find_axis(axes, n, t, u) <= j:
                    continue
                _normal_to_both(axes, i, j, 3, main)
                _set_rows(frame, axes, i, j, main)
                if f > 0:
                    for m in range(3):
                        frame[1, m] = -frame[1, m]
                if abs(determinant(frame)) == 1:
                    kind = HP
                else:
                    # Centred in space if (2,1,1)/3 or (1,2,1)/3 is a lattice point; in the plane otherwise.
                    kind = AP
                    for s in range(1, 3):
                        inside = True
                        for m in range(3):
                            if (s * frame[0, m] + (3 - s) * frame[1, m] + frame[2, m]) % 3:
                                inside = False
                        if inside:
                            kind = HR
                if kind != AP:
                    _offer(kind, frame, metric, strains, frames, work)
            elif q == 2 * k:
                _turned(axes, j, i, t, u)
                k2 = _find_axis(axes, n, t, u)
                if k2 < i:
                    continue
                _turned(axes, i, j, t, u)
                l2 = _find_axis(axes, n, t, u)
                if l2 < j:
                    continue
                _normal_to_both(axes, i, j, 3, main)
                _normal_to_both(axes, i, j, 0, normal)
                m2 = _find_axis(axes, n, main, normal)
                if m2 < 0:
                    continue
                _set_rows(frame, axes, i, k2, main)
                _set_rows(other, axes, j, l2, main)
                if found == MAX_TETRAGONAL:
                    return False
                tetragonal[found, 0] = m2
                tetragonal[found, 1], tetragonal[found, 2] = i, k2
                tetragonal[found, 3], tetragonal[found, 4] = j, l2
                found += 1
                d, e = abs(determinant(frame)), abs(determinant(other))
                kind = TP if min(d, e) == 1 else TI
                _offer(kind, frame if d < e else other, metric, strains, frames, work)
    _cubic(found, tetragonal, metric, axes, strains, frames, frame, work)
    return True


@inner
def _cubic(
    found: int,
    tetragonal: Ints,
    metric: Floats,
    axes: Ints,
    strains: Floats,
    frames: Ints,
    frame: Ints,
    work: Floats,
) -> None:
    """Cubic groups: two tetragonal ones (main axis; first pair; second pair) that share three axes."""
    for p in range(found):
        for q in range(found):
            z, x = tetragonal[p, 0], tetragonal[q, 0]
            for a in range(1, 5):
                if tetragonal[p, a] != x:
                    continue
                y = tetragonal[p, 3 - a if a < 3 else 7 - a]
                if not z < x < y:
                    continue
                for b in range(1, 5):
                    if tetragonal[q, b] == z and tetragonal[q, 3 - b if b < 3 else 7 - b] == y:
                        for m in range(3):
                            frame[0, m], frame[1, m], frame[2, m] = axes[z, m], axes[x, m], axes[y, m]
                        d = abs(determinant(frame))
                        kind = CP if d == 1 else (CI if d == 2 else CF)
                        _offer(kind, frame, metric, strains, frames, work)
