"""The metric of a lattice, and the lower triangular cell that belongs to a metric.

Rows are lattice vectors. The metric of a cell L is G = L L^T (square angstrom).
"""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats


def metric(cells: Floats) -> Floats:
    """The metrics (..., 3, 3) of cells (..., 3, 3) with rows as vectors: G = L L^T, square angstrom."""
    return cells @ np.swapaxes(cells, -1, -2)


def characteristics(metrics: Floats) -> Floats:
    """The six numbers (..., 6) A, B, C, xi, eta, zeta of metrics (..., 3, 3).

    A, B, C are the squared edges; xi = 2 b.c, eta = 2 a.c, zeta = 2 a.b (Krivy & Gruber 1976).
    """
    return np.stack(
        [
            metrics[..., 0, 0],
            metrics[..., 1, 1],
            metrics[..., 2, 2],
            2 * metrics[..., 1, 2],
            2 * metrics[..., 0, 2],
            2 * metrics[..., 0, 1],
        ],
        axis=-1,
    )


def at_unit_volume(metrics: Floats) -> Floats:
    """The metrics (..., 3, 3) scaled so that the cell has volume 1: what tolerances of the reduction refer to."""
    return np.asarray(metrics / np.cbrt(np.linalg.det(metrics))[..., None, None], dtype=np.float64)


def lower_triangular(cells: Floats) -> tuple[Floats, Floats]:
    """Lower triangular cells with positive diagonal, and the rotations that lead back.

    For right-handed cells (..., 3, 3) returns (L, R) with cell = L R, a = L[0] along x, b = L[1] in the xy plane,
    R proper orthogonal. Precondition: det > 0; a left-handed cell would give an improper R.
    """
    a, b = cells[..., 0, :], cells[..., 1, :]
    # Gram-Schmidt by cross products: the rows of R are the unit vectors along a, along b less its part on a, and c*.
    ex = a / np.linalg.norm(a, axis=-1, keepdims=True)
    ez = np.cross(a, b)
    ez /= np.linalg.norm(ez, axis=-1, keepdims=True)
    ey = np.cross(ez, ex)
    frames = np.stack([ex, ey, ez], axis=-2)
    lower = cells @ np.swapaxes(frames, -1, -2)
    lower[..., 0, 1] = 0.0
    lower[..., 0, 2] = 0.0
    lower[..., 1, 2] = 0.0
    return lower, frames
