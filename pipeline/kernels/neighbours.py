"""Sites in bins of fractional space, to find the one near a point without looking at all (compiled)."""

from __future__ import annotations

import numpy as np

from ..model.batch import Floats, Ints
from .compiled import inner
from .vectors import nearest_square, plane_spacing


@inner
def fill_bins(cell: Floats, x: Floats, reach: float, shape: Ints, width: Floats) -> tuple[Ints, Ints]:
    """Sort sites x (n, 3), fractional in [0, 1), into bins; returns (start, order).

    `shape` (3,) int64 is filled with the numbers of bins along the axes, at most about n in all and each wider than
    twice `reach` (angstrom), width (3,) float64 with `reach` in fractions of each axis; bin b holds the sites
    order[start[b]:start[b + 1]].
    """
    n = len(x)
    most = int(np.ceil(n ** (1.0 / 3.0)))
    for i in range(3):
        width[i] = reach / plane_spacing(cell, i)
        shape[i] = max(1, min(most, int(0.5 / width[i])))
    bins = shape[0] * shape[1] * shape[2]
    start = np.zeros(bins + 1, np.int64)
    place = np.empty(n, np.int64)
    for j in range(n):
        b = 0
        for i in range(3):
            b = b * shape[i] + min(shape[i] - 1, int(x[j, i] * shape[i]))
        place[j] = b
        start[b + 1] += 1
    for b in range(bins):
        start[b + 1] += start[b]
    order = np.empty(n, np.int64)
    filled = np.zeros(bins, np.int64)
    for j in range(n):
        b = place[j]
        order[start[b] + filled[b]] = j
        filled[b] += 1
    return start, order


@inner
def site_near(
    cell: Floats,
    x: Floats,
    kind: Ints,
    point: Floats,
    wanted: int,
    reach: float,
    shape: Ints,
    width: Floats,
    start: Ints,
    order: Ints,
    low: Ints,
    high: Ints,
) -> int:
    """The first site of kind `wanted` within `reach` (angstrom) of a fractional point (3,) in [0, 1); -1 for none.

    cell (3, 3) with all plane spacings above 2 reach, so that the rounded difference is the only image within reach.
    shape, width, start, order as fill_bins gave them; low and high (3,) int64 are room to work in.
    """
    for k in range(3):
        low[k] = int(np.floor((point[k] - width[k]) * shape[k]))
        high[k] = min(int(np.floor((point[k] + width[k]) * shape[k])), low[k] + shape[k] - 1)
    for b0 in range(low[0], high[0] + 1):
        for b1 in range(low[1], high[1] + 1):
            for b2 in range(low[2], high[2] + 1):
                b = ((b0 % shape[0]) * shape[1] + b1 % shape[1]) * shape[2] + b2 % shape[2]
                for p in range(start[b], start[b + 1]):
                    k = order[p]
                    if kind[k] == wanted:
                        r = nearest_square(x[k, 0] - point[0], x[k, 1] - point[1], x[k, 2] - point[2], cell)
                        if r <= reach * reach:
                            return k  # type: ignore[no-any-return]
    return -1
