"""Lattice type and ladder of many lattices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..model.batch import Floats, Ints
from .automorphisms import MAX_AXES, two_fold_axes
from .compiled import inner, kernel
from .conventional import conventional_matrix
from .holohedry import HP, OP, OS, TP, nearest_types

# Order in which a type is taken as the label: largest holohedry first; among equals the least strain.
RANK = np.array([2, 4, 4, 8, 8, 8, 8, 16, 16, 12, 24, 48, 48, 48], np.int64)

PLANE_TYPES = np.array([OP, OS, TP, HP], np.int64)
"""Codes that a layer can have, as the prism on its plane lattice: op, oc, tp, hp."""


@inner
def metric_of(cell: Floats, layer: bool, metric: Floats) -> None:
    """Gram matrix of the rows; for a layer, of its plane vectors and a normal long enough to be told from them."""
    for i in range(3):
        for j in range(3):
            metric[i, j] = cell[i, 0] * cell[j, 0] + cell[i, 1] * cell[j, 1] + cell[i, 2] * cell[j, 2]
    if layer:
        metric[0, 2] = metric[2, 0] = metric[1, 2] = metric[2, 1] = 0.0
        metric[2, 2] = 4.0 * (metric[0, 0] + metric[1, 1])


@inner
def invert(g: Floats, out: Floats) -> None:
    """Inverse of a symmetric (3, 3) by its adjugate."""
    a = g[1, 1] * g[2, 2] - g[1, 2] * g[1, 2]
    b = g[0, 2] * g[1, 2] - g[0, 1] * g[2, 2]
    c = g[0, 1] * g[1, 2] - g[0, 2] * g[1, 1]
    d = g[0, 0] * a + g[0, 1] * b + g[0, 2] * c
    out[0, 0] = a / d
    out[1, 1] = (g[0, 0] * g[2, 2] - g[0, 2] * g[0, 2]) / d
    out[2, 2] = (g[0, 0] * g[1, 1] - g[0, 1] * g[0, 1]) / d
    out[0, 1] = out[1, 0] = b / d
    out[0, 2] = out[2, 0] = c / d
    out[1, 2] = out[2, 1] = (g[0, 1] * g[0, 2] - g[0, 0] * g[1, 2]) / d


@inner
def _keep_plane_axes(n: int, axes: Ints, strains: Floats) -> int:
    """Of a prism's axes those in the plane or along the normal: the others mix the normal in, which is made up."""
    kept = 0
    for i in range(n):
        along = axes[i, 0] == 0 and axes[i, 1] == 0 and axes[i, 3] == 0 and axes[i, 4] == 0
        across = axes[i, 2] == 0 and axes[i, 5] == 0
        if along or across:
            for m in range(7):
                axes[kept, m] = axes[i, m]
            strains[kept] = strains[i]
            kept += 1
    return kept


@kernel
def classify(
    cells: Floats,
    layers: NDArray[np.bool_],
    tolerance: float,
    reach: float,
    kinds: Ints,
    ladders: Floats,
    reaches: Floats,
    matrices: Ints,
) -> None:
    """Label, ladder and conventional matrix of each lattice.

    cells: (n, 3, 3) float64, rows are a reduced basis (any basis gives the same answer, only slower). layers: (n,)
    bool, True where only the first two rows are periodic. tolerance, reach: logarithmic strains. Filled: kinds (n,)
    int64, codes 0 to 13 (a layer: of the prism on it, 0 for none); ladders (n, 14) float64, the least strain to each
    type, infinite where none lies within the reach; reaches (n,) float64, the strain up to which the ladder is
    complete: `reach`, halved as often as needed where the lattice is so flat or long that more than MAX_AXES axes lie
    within it; matrices (n, 3, 3) int64.
    """
    axes = np.empty((MAX_AXES, 7), np.int64)
    axis_strains = np.empty(MAX_AXES)
    metric = np.empty((3, 3))
    inverse = np.empty((3, 3))
    frames = np.zeros((14, 3, 3), np.int64)
    for row in range(cells.shape[0]):
        layer = layers[row]
        metric_of(cells[row], layer, metric)
        invert(metric, inverse)
        r = reach
        strains = ladders[row]
        while True:
            n = two_fold_axes(metric, inverse, r, axes, axis_strains)
            if n >= 0:
                if layer:
                    n = _keep_plane_axes(n, axes, axis_strains)
                if nearest_types(metric, n, axes, axis_strains, strains, frames):
                    break
            r *= 0.5
        reaches[row] = r
        best = 0
        for kind in range(1, 14):
            if strains[kind] > r:
                strains[kind] = np.inf
            if layer and kind != OP and kind != OS and kind != TP and kind != HP:
                strains[kind] = np.inf
            if strains[kind] <= tolerance:
                higher = RANK[kind] - RANK[best]
                if higher > 0 or (higher == 0 and strains[kind] < strains[best]):
                    best = kind
        kinds[row] = best
        conventional_matrix(best, frames[best], metric, matrices[row])
        if layer and matrices[row, 2, 2] < 0:
            # The normal keeps its sense; the plane cell is turned over instead.
            for m in range(3):
                matrices[row, 2, m] = -matrices[row, 2, m]
            if best in (TP, HP):
                for m in range(3):
                    matrices[row, 0, m], matrices[row, 1, m] = matrices[row, 1, m], matrices[row, 0, m]
            else:
                for m in range(3):
                    matrices[row, 1, m] = -matrices[row, 1, m]


def warm_up() -> None:
    """Compile the kernel for read-only cells, as batches have them."""
    cells, n = np.eye(3)[None] * 4.0, 1
    cells.flags.writeable = False
    classify(
        cells, np.zeros(n, np.bool_), 0.003, 0.1,
        np.zeros(n, np.int64), np.zeros((n, 14)), np.zeros(n), np.zeros((n, 3, 3), np.int64),
    )  # fmt: skip
