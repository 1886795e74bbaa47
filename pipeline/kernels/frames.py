"""Crystals seen from one that all of them match: displacements of its sites, and pairs that these rule out.

grouping/frames.py says what is compared and why nothing that matches is lost.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from .compiled import inner, kernel
from .lattice_maps import inverse3, product3
from .match import float_of, one_site
from .match_columns import Crystals, Floats, Ints
from .paired_sites import images_of, mean_metric
from .pairing import nearest_pairing


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
    s, mean = np.empty(3), np.empty(3)
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
        reach2 = (limits[i] + 1e-7) ** 2
        if not nearest_pairing(
            targets, blocks, c.positions, c.blocks[hub], g, s[0], s[1], s[2], reach2, partner, images, d
        ):
            continue
        found[i] = True
        filled[:] = 0
        copies = count // n
        mean[:] = 0.0
        for t in range(count):
            for j in range(3):
                mean[j] += d[t, j] / count
        for t in range(count):
            square = 0.0
            k = partner[t] - first
            place = starts[i] + k * copies + filled[k]
            filled[k] += 1
            for j in range(3):
                x = 0.0
                for m in range(3):
                    x += (mean[m] - d[t, m]) * cell[m, j]
                square += x * x
                all_moved[place, j] = x
                moved[i, k, j] += x / copies
            farthest[i] = max(farthest[i], math.sqrt(square))
    return moved, all_moved, farthest, metrics, found


@inner
def _near(first: Floats, i: int, second: Floats, j: int, reach2: float) -> bool:
    x, y, z = first[i, 0] - second[j, 0], first[i, 1] - second[j, 1], first[i, 2] - second[j, 2]
    return bool(x * x + y * y + z * z <= reach2)


@inner
def _each_is_near_one(
    first: Floats, start: int, stop: int, second: Floats, begin: int, end: int, reach2: float
) -> bool:
    """Whether each row of `first` from start to stop is near a row of `second` from begin to end."""
    for i in range(start, stop):
        found = False
        for j in range(begin, end):
            if _near(first, i, second, j, reach2):
                found = True
                break
        if not found:
            return False
    return True


@kernel
def not_ruled_out(
    expected: Floats,
    expected_images: Floats,
    expected_lengths: Floats,
    moved: Floats,
    images: Floats,
    starts: Ints,
    lengths: Floats,
    others: Ints,
    reach: float,
    slack: float,
) -> NDArray[np.bool_]:
    """Which of the members at rows `others` are as is expected of a match under one of m ways.

    expected (m, n, 3), expected_images (m, n a, 3), expected_lengths (m, w): displacements of the n sites of the hub,
    of the a images of each, and logarithms of the lengths of some vectors. moved (f, n, 3), images (s, 3), starts (f +
    1,), lengths (f, w): those of the members, the images of each site together. reach: angstrom, slack: of logarithms.
    """
    n, w = expected.shape[1], lengths.shape[1]
    a = expected_images.shape[1] // n
    out = np.zeros(others.shape[0], np.bool_)
    reach2 = reach * reach
    for m in range(expected.shape[0]):
        means, all_images = expected[m], expected_images[m]
        for o in range(others.shape[0]):
            if out[o]:
                continue
            other = others[o]
            its_means = moved[other]
            close = True
            for t in range(n):
                if not _near(its_means, t, means, t, reach2):
                    close = False
                    break
            for i in range(w):
                close = close and abs(lengths[other, i] - expected_lengths[m, i]) <= slack
            if not close:
                continue
            first = starts[other]
            b = (starts[other + 1] - first) // n
            for t in range(n):
                begin = first + t * b
                if not (
                    _each_is_near_one(all_images, t * a, (t + 1) * a, images, begin, begin + b, reach2)
                    and _each_is_near_one(images, begin, begin + b, all_images, t * a, (t + 1) * a, reach2)
                ):
                    close = False
                    break
            out[o] = close
    return out


def warm_up() -> None:
    """Compile the kernels by seeing a crystal of one site from itself."""
    c, row, one, two = one_site(), np.zeros(1, np.int64), np.eye(3, dtype=np.int64)[None], np.array([0, 1])
    moved, images, _, _, _ = seen_from(c, 0, row, one, one.copy(), np.zeros((1, 3)), np.zeros(1), 0.01, two)
    lengths = np.zeros((1, 1))
    not_ruled_out(moved, images[None], lengths, moved, images, two, lengths, row, 0.1, 0.1)
