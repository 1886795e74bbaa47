"""Crystals seen from one that all of them match: displacements of its sites, and pairs that these rule out.

grouping/frames.py says what is compared and why nothing that matches is lost.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel
from .hermite import hermite
from .lattice_maps import inverse3, product3
from .match import float_of, one_site
from .match_columns import Crystals, Floats, Ints
from .paired_sites import images_of, mean_metric, pair_up
from .self_maps import nearly_translated, self_maps

PROBES = 6
"""Lattice vectors whose lengths are compared: the three of the cell, and the sums of two."""


@kernel
def seen_from(
    c: Crystals, hub: int, others: Ints, p: Ints, q: Ints, shift: Floats, limits: Floats, window: float, starts: Ints
) -> tuple[Floats, Floats, Floats, Floats, NDArray[np.bool_]]:
    """Displacements of the sites of `hub`: means (f, n, 3) and those of all images (starts[-1], 3), the largest lengths
    (f,), metrics (f, 3, 3), and which are found.

    others (f,): crystals with a match to the hub; p, q (f, 3, 3), shift (f, 3): the match, from the crystal to the hub;
    limits (f,): its largest shift; window: the shift searched with; starts (f + 1,): where the images of each begin,
    those of the hub's first site first. Displacements are in the Cartesian frame of the hub (angstrom), the mean over
    all removed; means are over the images that a site has in the common cell. A metric is that of the hub's cell as the
    crystal has it. Not found: the pairing is not unique.
    """
    first = c.offsets[hub]
    n = c.offsets[hub + 1] - first
    size = others.shape[0]
    moved, farthest, all_moved = np.zeros((size, n, 3)), np.zeros(size), np.zeros((starts[-1], 3))
    filled = np.empty(n, np.int64)
    metrics, found = np.zeros((size, 3, 3)), np.zeros(size, np.bool_)
    cell = c.cells[hub]
    s = np.empty(3)
    for i in range(size):
        a = others[i]
        w = product3(inverse3(float_of(p[i])), float_of(q[i]))
        image = product3(inverse3(w), c.cells[a])
        for j in range(3):
            for k in range(3):
                metrics[i, j, k] = image[j, 0] * image[k, 0] + image[j, 1] * image[k, 1] + image[j, 2] * image[k, 2]
        if 4.0 * window * math.exp(c.slack) >= min(c.clear[a], c.clear[hub]):
            continue
        targets, blocks = images_of(c, a, p[i], w)
        count = targets.shape[0]
        g = mean_metric(c.cells[a], cell, w)
        for j in range(3):
            s[j] = shift[i, 0] * q[i, 0, j] + shift[i, 1] * q[i, 1, j] + shift[i, 2] * q[i, 2, j]
        partner, images, d = np.empty(count, np.int64), np.empty((count, 3), np.int64), np.empty((count, 3))
        reach = limits[i] + 1e-7
        common = hermite(q[i])
        if pair_up(c, a, hub, True, targets, blocks, g, s, reach, reach, common, partner, images, d) < 0:
            continue
        found[i] = True
        filled[:] = 0
        copies = count // n
        for t in range(count):
            square = 0.0
            k = partner[t] - first
            place = starts[i] + k * copies + filled[k]
            filled[k] += 1
            for j in range(3):
                x = -(d[t, 0] * cell[0, j] + d[t, 1] * cell[1, j] + d[t, 2] * cell[2, j])
                square += x * x
                all_moved[place, j] = x
                moved[i, k, j] += x / copies
            farthest[i] = max(farthest[i], math.sqrt(square))
    return moved, all_moved, farthest, metrics, found


@inner
def _probe(row: Floats, at: int) -> None:
    """Fill row (3,) with probe `at` of PROBES."""
    for i in range(3):
        row[i] = 0.0
    if at < 3:
        row[at] = 1.0
    else:
        row[0 if at < 5 else 1] = 1.0
        row[1 if at == 3 else 2] = 1.0


@inner
def _half_log_length2(metric: Floats, v: Floats) -> float:
    square = 0.0
    for i in range(3):
        for j in range(3):
            square += v[i] * metric[i, j] * v[j]
    return 0.5 * math.log(square)


@kernel
def probe_lengths(metrics: Floats) -> Floats:
    """(f, PROBES): logarithms of the lengths of the probes in each metric (f, 3, 3)."""
    out = np.empty((metrics.shape[0], PROBES))
    v = np.empty(3)
    for i in range(metrics.shape[0]):
        for m in range(PROBES):
            _probe(v, m)
            out[i, m] = _half_log_length2(metrics[i], v)
    return out


@inner
def _each_is_near_one(first: Floats, second: Floats, reach2: float) -> bool:
    """Whether each row of `first` (a, 3) is near one of `second` (b, 3)."""
    for i in range(first.shape[0]):
        found = False
        for j in range(second.shape[0]):
            x, y, z = first[i, 0] - second[j, 0], first[i, 1] - second[j, 1], first[i, 2] - second[j, 2]
            if x * x + y * y + z * z <= reach2:
                found = True
                break
        if not found:
            return False
    return True


@inner
def _images_agree(first: Floats, second: Floats, partners: Ints, off: Floats, turn: Floats, reach2: float) -> bool:
    """Whether each image of each site has one of its partner within reach, and the other way round.

    first (n a, 3), second (n b, 3): displacements of the images, those of each site together; off (n, 3): Cartesian.
    """
    n = partners.shape[0]
    a, b = first.shape[0] // n, second.shape[0] // n
    expected = np.empty((a, 3))
    for t in range(n):
        for i in range(a):
            x, y, z = first[t * a + i, 0], first[t * a + i, 1], first[t * a + i, 2]
            for j in range(3):
                expected[i, j] = off[t, j] + x * turn[0, j] + y * turn[1, j] + z * turn[2, j]
        images = second[partners[t] * b : (partners[t] + 1) * b]
        if not _each_is_near_one(expected, images, reach2) or not _each_is_near_one(images, expected, reach2):
            return False
    return True


@kernel
def not_ruled_out(
    cell: Floats,
    maps: Ints,
    partners: Ints,
    offsets: Floats,
    moved: Floats,
    all_moved: Floats,
    starts: Ints,
    metrics: Floats,
    lengths: Floats,
    row: int,
    others: Ints,
    reach: float,
    slack: float,
) -> NDArray[np.bool_]:
    """Which of the rows `others` could match row `row` under one of the ways to lay the hub onto itself.

    cell (3, 3): of the hub; maps (m, 3, 3), partners (m, n), offsets (m, n, 3): as self_maps; moved (f, n, 3),
    all_moved (s, 3), starts (f + 1,), metrics (f, 3, 3): as seen_from; lengths (f, PROBES). reach: angstrom, slack: of
    logarithms of lengths.
    """
    n = moved.shape[1]
    out = np.zeros(others.shape[0], np.bool_)
    expected, expected_lengths = np.empty((n, 3)), np.empty(PROBES)
    off, back, v, u = np.empty((n, 3)), inverse3(cell), np.empty(3), np.empty(3)
    reach2 = reach * reach
    for m in range(maps.shape[0]):
        w = float_of(maps[m])
        turn = product3(product3(back, w), cell)
        for t in range(n):
            to = partners[m, t]
            a, b, d = offsets[m, t, 0], offsets[m, t, 1], offsets[m, t, 2]
            x, y, z = moved[row, t, 0], moved[row, t, 1], moved[row, t, 2]
            for j in range(3):
                off[t, j] = a * cell[0, j] + b * cell[1, j] + d * cell[2, j]
                expected[to, j] = off[t, j] + x * turn[0, j] + y * turn[1, j] + z * turn[2, j]
        inverse = inverse3(w)
        for i in range(PROBES):
            _probe(u, i)
            for j in range(3):
                v[j] = u[0] * inverse[0, j] + u[1] * inverse[1, j] + u[2] * inverse[2, j]
            expected_lengths[i] = _half_log_length2(metrics[row], v)
        own = all_moved[starts[row] : starts[row + 1]]
        for o in range(others.shape[0]):
            if out[o]:
                continue
            b = others[o]
            close = True
            for t in range(n):
                x = moved[b, t, 0] - expected[t, 0]
                y = moved[b, t, 1] - expected[t, 1]
                z = moved[b, t, 2] - expected[t, 2]
                if x * x + y * y + z * z > reach2:
                    close = False
                    break
            if close:
                for i in range(PROBES):
                    if abs(lengths[b, i] - expected_lengths[i]) > slack:
                        close = False
                        break
            if close:
                out[o] = _images_agree(own, all_moved[starts[b] : starts[b + 1]], partners[m], off, turn, reach2)
    return out


def warm_up() -> None:
    """Compile the kernels by seeing a crystal of one site from itself."""
    c, row, one = one_site(), np.zeros(1, np.int64), np.eye(3, dtype=np.int64)[None]
    nearly_translated(c, 0, 0.1)
    ways = self_maps(c, 0, 0.01, 0.1)
    two = np.array([0, 1])
    moved, images, _, metrics, _ = seen_from(c, 0, row, one, one.copy(), np.zeros((1, 3)), np.zeros(1), 0.01, two)
    not_ruled_out(c.cells[0], *ways, moved, images, two, metrics, probe_lengths(metrics), 0, row, 0.1, 0.1)
