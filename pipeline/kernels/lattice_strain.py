"""How far a lattice is from the nearest one whose conventional cell has the shape of a crystal family.

Lattices of one metric are points of the cone of positive matrices; d(G, H) = |log(G^-1/2 H G^-1/2)| with the
Frobenius norm makes it a space without positive curvature in which every change of basis is a motion (Bhatia,
Positive Definite Matrices, 2007, ch. 6). The metrics that a group of basis changes leaves alone form a geodesically
closed set, the nearest point of it is unique, and it is the geometric (Karcher) mean of the images of G under the
group: the mean is left alone because the set of images is, and it is nearest because each image is as far from a
fixed point as G is. Averaging the metric entry by entry instead agrees to first order only; averages of logarithms
treat a stretch and its inverse alike.

In a Cartesian frame along the axes of the wanted family, with B the ideal conventional cell and C the metric of the
given one, E = log(B^-1 C B^-T)/2 is the logarithmic strain from B, and the part of E that the family allows is:
orthorhombic the diagonal, tetragonal and hexagonal (hR too, in hexagonal axes) the diagonal with the mean of its
first two entries, cubic the mean of the diagonal. B is the nearest lattice when that part is zero; moving B by it is
the step of the iteration for the mean, with an error that falls with the third power, so that two steps from the
entry-wise start reach 1e-9 for strains to 0.1. The value returned is the largest |principal value| of E.
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats
from .compiled import inner

ORTHORHOMBIC, TETRAGONAL, HEXAGONAL, CUBIC = 0, 1, 2, 3

STEPS = 3
"""Steps towards the mean before the strain is read off."""


@inner
def symmetric_eigen(a: Floats, v: Floats) -> None:
    """Cyclic Jacobi rotations on the symmetric (3, 3) `a` in place: eigenvalues on its diagonal, eigenvectors in the
    columns of `v`."""
    for i in range(3):
        for j in range(3):
            v[i, j] = 1.0 if i == j else 0.0
    for _ in range(12):
        off = a[0, 1] * a[0, 1] + a[0, 2] * a[0, 2] + a[1, 2] * a[1, 2]
        if off < 1e-30:
            return
        for p in range(2):
            for q in range(p + 1, 3):
                if a[p, q] == 0.0:
                    continue
                theta = (a[q, q] - a[p, p]) / (2.0 * a[p, q])
                t = 1.0 / (abs(theta) + np.sqrt(theta * theta + 1.0))
                if theta < 0:
                    t = -t
                c = 1.0 / np.sqrt(t * t + 1.0)
                s = t * c
                for k in range(3):
                    x, y = a[k, p], a[k, q]
                    a[k, p], a[k, q] = c * x - s * y, s * x + c * y
                for k in range(3):
                    x, y = a[p, k], a[q, k]
                    a[p, k], a[q, k] = c * x - s * y, s * x + c * y
                for k in range(3):
                    x, y = v[k, p], v[k, q]
                    v[k, p], v[k, q] = c * x - s * y, s * x + c * y


@inner
def family_strain(metric: Floats, family: int, a: Floats, v: Floats) -> float:
    """Logarithmic strain (>= 0) of the lattice with conventional metric (3, 3) to the nearest one of the family.

    The precondition is a cell that has nearly the shape (hexagonal: gamma near 120 degrees); far from it the iteration
    need not have converged. a, v: (3, 3) float64, overwritten.
    """
    # B^-1 for unit edges: rows of B are (1,0,0), (-1/2, sqrt3/2, 0), (0,0,1) for the hexagonal cell.
    f = 1.0 / np.sqrt(3.0) if family == HEXAGONAL else 0.0
    g = 2.0 / np.sqrt(3.0) if family == HEXAGONAL else 1.0
    # Cartesian Gram matrix B^-1 C B^-T of unit edges.
    xx = metric[0, 0]
    xy = f * metric[0, 0] + g * metric[0, 1]
    yy = f * f * metric[0, 0] + 2 * f * g * metric[0, 1] + g * g * metric[1, 1]
    xz = metric[0, 2]
    yz = f * metric[0, 2] + g * metric[1, 2]
    zz = metric[2, 2]
    lx, ly, lz = np.sqrt(xx), np.sqrt(yy), np.sqrt(zz)
    if family != ORTHORHOMBIC:
        lx = ly = np.sqrt(lx * ly)
    if family == CUBIC:
        lx = ly = lz = (lx * ly * lz) ** (1.0 / 3.0)
    largest = 0.0
    for _ in range(STEPS + 1):
        a[0, 0], a[1, 1], a[2, 2] = xx / (lx * lx), yy / (ly * ly), zz / (lz * lz)
        a[0, 1] = a[1, 0] = xy / (lx * ly)
        a[0, 2] = a[2, 0] = xz / (lx * lz)
        a[1, 2] = a[2, 1] = yz / (ly * lz)
        symmetric_eigen(a, v)
        e0, e1, e2 = 0.5 * np.log(a[0, 0]), 0.5 * np.log(a[1, 1]), 0.5 * np.log(a[2, 2])
        if family == CUBIC:
            # A multiple of the unit matrix commutes with everything: the first step is exact.
            mean = (e0 + e1 + e2) / 3.0
            largest = max(abs(e0 - mean), abs(e1 - mean), abs(e2 - mean))
            break
        largest = max(abs(e0), abs(e1), abs(e2))
        dx = v[0, 0] ** 2 * e0 + v[0, 1] ** 2 * e1 + v[0, 2] ** 2 * e2
        dy = v[1, 0] ** 2 * e0 + v[1, 1] ** 2 * e1 + v[1, 2] ** 2 * e2
        dz = v[2, 0] ** 2 * e0 + v[2, 1] ** 2 * e1 + v[2, 2] ** 2 * e2
        if family != ORTHORHOMBIC:
            dx = dy = 0.5 * (dx + dy)
        if abs(dx) + abs(dy) + abs(dz) < 1e-12:
            break
        lx *= np.exp(dx)
        ly *= np.exp(dy)
        lz *= np.exp(dz)
    return largest
