"""Structures that are periodic in two directions: the aperiodic direction goes to the third row of the cell."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from .sites import StructureRefused

ROOM = 10.0
"""angstrom added to twice the extent of a layer where a file gives no vector for the aperiodic direction: the gap above
it is then wider than any inside it, so that the heights are read as they stand (lattice/layer.py)."""


def oriented_cell(
    cell: Sequence[float], periodic: Sequence[bool], cartesian: Sequence[float]
) -> tuple[list[float], int]:
    """The cell with the aperiodic row last, and the periodicity (3 or 2).

    cell: nine numbers (rows a, b, c, angstrom). periodic: three flags. cartesian: flat Cartesian positions, which stay
    as they are (fractional ones follow from the new cell). Rows are exchanged cyclically, so that handedness is kept. A
    missing (zero) aperiodic vector is set along the normal of the layer, twice as long as the layer is thick plus ROOM.
    Raises StructureRefused (periodicity_unsupported) for fewer than two periodic directions.
    """
    count = sum(map(bool, periodic))
    if count == 3:
        return list(cell), 3
    if count < 2:
        raise StructureRefused("periodicity_unsupported", f"periodic in {count} of three directions; 2 or 3 are needed")
    at = next(i for i in range(3) if not periodic[i])
    rows = np.roll(np.array(cell, np.float64).reshape(3, 3), 2 - at, axis=0)
    if not rows[2].any():
        normal = np.cross(rows[0], rows[1])
        length = float(np.linalg.norm(normal))
        if length == 0:
            raise StructureRefused("cell_zero", "the two periodic directions are parallel, or one has length 0")
        normal /= length
        heights = np.array(cartesian, np.float64).reshape(-1, 3) @ normal
        rows[2] = normal * (ROOM + (2.0 * float(np.ptp(heights)) if len(heights) else 0.0))
    flat: list[float] = rows.ravel().tolist()
    return flat, 2
