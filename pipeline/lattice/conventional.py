"""Whether a cell is a conventional cell of its Bravais type: the predicate that checks the classification.

It shares nothing with the kernels that build the cell: it looks at the cell and at the integer matrix alone.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..model.batch import Floats, Ints
from .bravais import ALL_TYPES, CENTRING_POINTS, multiplicity

_CROSSED = np.array([[1.0, 0.0, 0.0], [-0.5, np.sqrt(0.75), 0.0], [0.0, 0.0, 1.0]])
"""The hexagonal cell of unit edges, rows a, b, c."""


def family_mismatch(cells: Floats, family: str) -> Floats:
    """(n,) largest logarithmic strain between conventional cells (n, 3, 3) and their shape idealised for a family.

    family: a, m, o, t, h or c. The ideal shape is found in one step from the given edges (error of third order in the
    strain): angles set to 90 (120) degrees, edges that must be equal to their logarithmic mean.
    """
    if family == "a":
        return np.zeros(len(cells))
    frame = np.linalg.inv(_CROSSED) if family == "h" else np.eye(3)
    g = frame @ (cells @ np.swapaxes(cells, -1, -2)) @ frame.T
    edges = np.sqrt(np.einsum("nii->ni", g))
    if family == "m":
        # The plane of a and c keeps its angle: go to axes a, b, and the part of c across a.
        shear = np.broadcast_to(np.eye(3), g.shape).copy()
        shear[:, 2, 0] = -g[:, 0, 2] / g[:, 0, 0]
        g = shear @ g @ np.swapaxes(shear, -1, -2)
        edges = np.sqrt(np.einsum("nii->ni", g))
    values, vectors = np.linalg.eigh(g / (edges[:, :, None] * edges[:, None, :]))
    strain = np.einsum("nij,nj,nkj->nik", vectors, 0.5 * np.log(values), vectors)
    i = np.arange(3)
    diagonal = strain[:, i, i] + np.log(edges)
    allowed = diagonal.copy()
    if family in "th":
        allowed[:, :2] = diagonal[:, :2].mean(axis=1, keepdims=True)
    elif family == "c":
        allowed[:] = diagonal.mean(axis=1, keepdims=True)
    strain[:, i, i] = diagonal - allowed
    if family == "m":
        strain[:, 0, 2] = strain[:, 2, 0] = 0.0
    return np.asarray(np.abs(np.linalg.eigvalsh(strain)).max(axis=1), dtype=np.float64)


def holds_lattice(matrices: Ints, symbol: str) -> NDArray[np.bool_]:
    """Whether each integer matrix C (n, 3, 3) leads from a primitive basis to the conventional cell of `symbol`.

    True where det C is the number of lattice points of the cell, positive, and each of those points, as fractions of
    the conventional cell, is an integer combination of the primitive vectors: point @ C. Then primitive and centred
    conventional cell have the same lattice points, for the points counted are all there is room for.
    """
    points = np.array(CENTRING_POINTS[symbol[1]]) @ matrices
    determinants = np.round(np.linalg.det(matrices)).astype(np.int64)
    whole = np.abs(points - np.round(points)).max(axis=(1, 2)) < 1e-9
    return np.asarray(whole & (determinants == multiplicity(symbol)), np.bool_)


def is_conventional(cells: Floats, matrices: Ints, codes: Ints, tolerance: float) -> NDArray[np.bool_]:
    """Whether the conventional cells (n, 3, 3) have the shape and the points of their types.

    matrices: (n, 3, 3), cells = matrices @ primitive; codes: (n,) index in ALL_TYPES; tolerance: the largest strain
    from the ideal shape. Layers are taken as prisms of unit height on the plane cell.
    """
    good = np.linalg.det(cells) > 0
    for code in np.unique(codes):
        rows = np.flatnonzero(codes == code)
        symbol = ALL_TYPES[code]
        chosen = cells[rows]
        family = symbol[0]
        if symbol[1].islower():
            family = "a" if family == "m" else family
            normal = np.cross(chosen[:, 0], chosen[:, 1])
            chosen = np.stack([chosen[:, 0], chosen[:, 1], normal / np.linalg.norm(normal, axis=1)[:, None]], axis=1)
        mismatch = family_mismatch(chosen, family)
        good[rows] &= holds_lattice(matrices[rows], symbol) & (mismatch <= tolerance * (1 + 10 * tolerance) + 1e-9)
    return np.asarray(good, np.bool_)
