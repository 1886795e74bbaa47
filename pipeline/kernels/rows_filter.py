"""Whether the distance rows of two crystals allow a match: sorted columns, then row against row, then by species.

All distances are transformed (grouping/candidates.py), so that every test is |y_a - y_b| <= slack. Each test follows
from the bound on paired sites; none looks at the number of sites, the symmetry or the reduced cell.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel

Singles = NDArray[np.float32]
Ints = NDArray[np.int64]


@kernel
def sort_columns(rows: Singles, blocks: Ints) -> Singles:
    """Each column of `rows` (m, k) sorted within each species of each crystal; blocks (n, kinds + 1) as in match.py."""
    out = rows.copy()
    for c in range(blocks.shape[0]):
        for s in range(blocks.shape[1] - 1):
            lo, hi = blocks[c, s], blocks[c, s + 1]
            for t in range(rows.shape[1]):
                for i in range(lo + 1, hi):
                    v = out[i, t]
                    j = i - 1
                    while j >= lo and out[j, t] > v:
                        out[j + 1, t] = out[j, t]
                        j -= 1
                    out[j + 1, t] = v
    return out


@inner
def _columns_agree(ordered: Singles, a: Ints, b: Ints, slack: float) -> bool:
    """Sorted columns of two crystals within the slack; unequal numbers of sites by their common refinement.

    A pairing in the common cell takes n_a copies of one column onto n_b copies of the other. Sorting both does not
    raise the largest difference, and the sorted copies are step functions of u in (0, 1): equal steps are met once
    each.
    """
    for s in range(a.shape[0] - 1):
        size_a, size_b = a[s + 1] - a[s], b[s + 1] - b[s]
        i, j = 0, 0
        while i < size_a and j < size_b:
            for t in range(ordered.shape[1]):
                if abs(ordered[a[s] + i, t] - ordered[b[s] + j, t]) > slack:
                    return False
            end_a, end_b = (i + 1) * size_b, (j + 1) * size_a
            if end_a <= end_b:
                i += 1
            if end_b <= end_a:
                j += 1
    return True


@inner
def _site_allows(rows: Singles, grouped: Singles, counts: Ints, p: int, q: int, slack: float) -> bool:
    """Whether sites p and q can be paired: distances to all neighbours, then to the neighbours of each species.

    A species that has fewer neighbours listed at one site has its next one there beyond the last distance of that row:
    the other site's distance of that place must reach to within the slack of it.
    """
    k = rows.shape[1]
    for t in range(k):
        if abs(rows[p, t] - rows[q, t]) > slack:
            return False
    if counts.shape[1] == 1:
        return True
    at_p, at_q = 0, 0
    for s in range(counts.shape[1]):
        more_p, more_q = counts[p, s], counts[q, s]
        both = min(more_p, more_q)
        for t in range(both):
            if abs(grouped[p, at_p + t] - grouped[q, at_q + t]) > slack:
                return False
        if more_p > both and grouped[p, at_p + both] < rows[q, k - 1] - slack:
            return False
        if more_q > both and grouped[q, at_q + both] < rows[p, k - 1] - slack:
            return False
        at_p += more_p
        at_q += more_q
    return True


@inner
def _each_has_partner(rows: Singles, grouped: Singles, counts: Ints, a: Ints, b: Ints, slack: float) -> bool:
    for s in range(a.shape[0] - 1):
        for p in range(a[s], a[s + 1]):
            found = False
            for q in range(b[s], b[s + 1]):
                if _site_allows(rows, grouped, counts, p, q, slack):
                    found = True
                    break
            if not found:
                return False
    return True


@kernel
def pairs_allowed(
    pairs: Ints,
    blocks: Ints,
    rows: Singles,
    ordered: Singles,
    grouped: Singles,
    counts: Ints,
    slack: float,
) -> tuple[NDArray[np.bool_], int]:
    """Which of the pairs (p, 2) the rows cannot rule out, and how many the sorted columns left."""
    out = np.zeros(pairs.shape[0], np.bool_)
    left = 0
    for i in range(pairs.shape[0]):
        a, b = blocks[pairs[i, 0]], blocks[pairs[i, 1]]
        if not _columns_agree(ordered, a, b, slack):
            continue
        left += 1
        out[i] = _each_has_partner(rows, grouped, counts, a, b, slack) and _each_has_partner(
            rows, grouped, counts, b, a, slack
        )
    return out, left


@kernel
def coordinates_close(coordinates: NDArray[np.float64], pairs: Ints, slack: float) -> NDArray[np.bool_]:
    """Which pairs (p, 2) of rows agree to the slack in every column (n, w); the last columns are looked at first."""
    out = np.zeros(pairs.shape[0], np.bool_)
    for i in range(pairs.shape[0]):
        a, b = pairs[i, 0], pairs[i, 1]
        close = True
        for t in range(coordinates.shape[1] - 1, -1, -1):
            if abs(coordinates[a, t] - coordinates[b, t]) > slack:
                close = False
                break
        out[i] = close
    return out


@kernel
def rows_close(coordinates: Singles, start: int, stop: int, row: int, slack: float) -> Ints:
    """The rows from start to stop that agree with `row` to the slack in every column, ascending."""
    out = np.empty(stop - start, np.int64)
    used = 0
    for i in range(start, stop):
        close = True
        for t in range(coordinates.shape[1]):
            if abs(coordinates[i, t] - coordinates[row, t]) > slack:
                close = False
                break
        if close:
            out[used] = i
            used += 1
    return out[:used]


@kernel
def close_counts(points: Singles, slack: float) -> Ints:
    """(n,): for each row of `points` (n, w), ascending in column 0, how many others agree to the slack in every column.

    Rows that agree lie in an interval of column 0; of those in it, most differ in one of the next few columns.
    """
    n = points.shape[0]
    out = np.zeros(n, np.int64)
    for i in range(n):
        for j in range(i + 1, n):
            if points[j, 0] - points[i, 0] > slack:
                break
            close = True
            for t in range(1, points.shape[1]):
                if abs(points[i, t] - points[j, t]) > slack:
                    close = False
                    break
            if close:
                out[i] += 1
                out[j] += 1
    return out


@kernel
def close_pairs(points: Singles, slack: float, passed_over: NDArray[np.bool_], most: int) -> Ints:
    """(p, 2): the pairs i < j of `close_counts` but those of two rows passed over; there are at most `most`."""
    n = points.shape[0]
    out = np.empty((most, 2), np.int64)
    used = 0
    for i in range(n):
        for j in range(i + 1, n):
            if points[j, 0] - points[i, 0] > slack:
                break
            if passed_over[i] and passed_over[j]:
                continue
            close = True
            for t in range(1, points.shape[1]):
                if abs(points[i, t] - points[j, t]) > slack:
                    close = False
                    break
            if close:
                out[used, 0] = i
                out[used, 1] = j
                used += 1
    return out[:used]


def warm_up() -> None:
    """Compile the kernels that are called from Python."""
    rows, blocks, pairs = np.zeros((1, 4), np.float32), np.array([[0, 1]]), np.zeros((1, 2), np.int64)
    pairs_allowed(pairs, blocks, rows, sort_columns(rows, blocks), rows.copy(), np.array([[4]]), 0.1)
    coordinates_close(np.zeros((1, 2)), pairs, 0.1)
    rows_close(np.zeros((1, 2), np.float32), 0, 1, 0, 0.1)
    close_counts(np.zeros((1, 2), np.float32), 0.1)
    close_pairs(np.zeros((1, 2), np.float32), 0.1, np.zeros(1, np.bool_), 0)
