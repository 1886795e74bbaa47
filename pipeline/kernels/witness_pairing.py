"""The pairing that belongs to a recorded match: from P, Q and the origin shift to a site of Q.B for each site of
P.A."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .compiled import kernel
from .hermite import coset_index, hermite
from .lattice_maps import inverse3, product3
from .match import float_of, one_site
from .match_columns import Crystals
from .paired_sites import images_of, mean_metric, pair_up

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@kernel
def recorded_pairings(
    c: Crystals,
    order: Ints,
    pairs: Ints,
    p: Ints,
    q: Ints,
    shift: Floats,
    limits: Floats,
    window: float,
    strain: float,
    starts: Ints,
) -> tuple[Ints, NDArray[np.bool_]]:
    """Pairings of pairs (n, 2), concatenated; pair i fills starts[i] to starts[i + 1].

    order (m,): sorted site to site of the batch; p, q (n, 3, 3), shift (n, 3) as Matches; limits (n,): the recorded
    largest shift; window, strain: what the matcher searched with, which decides whether the nearest site will do.
    Entry k is the site of Q.B for site k of P.A, both in the numbering of grouping/witness.py. The second array says
    which pairings came out within the limit: all of them, or the record does not belong to the crystals.
    """
    out = np.empty(starts[-1], np.int64)
    ok = np.zeros(pairs.shape[0], np.bool_)
    s = np.empty(3)
    for i in range(pairs.shape[0]):
        a, b = pairs[i, 0], pairs[i, 1]
        w = product3(inverse3(float_of(p[i])), float_of(q[i]))
        targets, blocks = images_of(c, a, p[i], w)
        g = mean_metric(c.cells[a], c.cells[b], w)
        common = hermite(q[i])
        index_a = targets.shape[0] // (c.offsets[a + 1] - c.offsets[a])
        index_b = common[0, 0] * common[1, 1] * common[2, 2]
        for j in range(3):
            s[j] = shift[i, 0] * q[i, 0, j] + shift[i, 1] * q[i, 1, j] + shift[i, 2] * q[i, 2, j]
        partner = np.empty(targets.shape[0], np.int64)
        images = np.empty((targets.shape[0], 3), np.int64)
        d = np.empty((targets.shape[0], 3))
        clear = 4.0 * window * np.exp(c.slack) < min(c.clear[a], c.clear[b])
        reach = limits[i] + 1e-7
        got = pair_up(c, a, b, clear, targets, blocks, g, s, reach, reach, common, partner, images, d)
        ok[i] = got >= 0
        if got < 0:
            continue
        for t in range(targets.shape[0]):
            site = order[c.offsets[a] + t // index_a] - c.offsets[a]
            other = order[partner[t]] - c.offsets[b]
            coset = coset_index(common, images[t, 0], images[t, 1], images[t, 2])
            out[starts[i] + site * index_a + t % index_a] = other * index_b + coset
    return out, ok


def warm_up() -> None:
    """Compile the kernel by pairing a crystal of one site with itself."""
    one = np.eye(3, dtype=np.int64)[None]
    recorded_pairings(
        one_site(), np.zeros(1, np.int64), np.zeros((1, 2), np.int64), one, one.copy(), np.zeros((1, 3)), np.zeros(1),
        0.01, 0.01, np.array([0, 1]),
    )  # fmt: skip
