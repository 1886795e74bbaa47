"""The witness of a match: all that is needed to check it by hand, and the equations that it satisfies.

A has the cell A (rows) with sites x_i, B the cell B with sites y_j, both primitive and in fractions of their own cell.

1. The common cell is P A for A and Q B for B; P and Q are integer matrices with |det P| sites(A) = |det Q| sites(B).
2. P A F = Q B defines F. Its singular values are the principal stretches: strain is the largest |ln| of them. F = U S
   V^T gives the orthogonal part O = U V^T (det O = -1 where B is matched as the mirror image): Q B is close to P A O.
3. Sites of P A are numbered k = i |det P| + j. With the Hermite form H = [[a, p, q], [0, b, r], [0, 0, c]] of P (rows),
   coset j stands for the integers n_j = (j // (b c), j // c mod b, j mod c), and the site lies at
   u_k = (x_i + n_j) P^-1 in fractions of the common cell. Sites v of Q B are numbered likewise.
4. v_pairing[k] = u_k + shift + delta_k + (integers), with the integers that leave every component of delta in
   [-1/2, 1/2). Paired sites are of one species, `pairing` is a permutation, and the delta_k add up to zero.
5. largest_shift is the largest length of delta_k in the metric (G_A + G_B) / 2, G_A = P A (P A)^T, G_B = Q B (Q B)^T.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..errors import NumericsError
from ..kernels.witness_pairing import recorded_pairings
from ..model.batch import Floats, Ints
from .preparation import Prepared
from .verification import NO_MATCH, Verified
from .window import Window


@dataclass(frozen=True, slots=True)
class Witnesses:
    """What `Verified` leaves out of the witnesses of its p matches."""

    orthogonal: Floats
    """(p, 3, 3): O, in the Cartesian frames of the two cells; row vectors of A times O stand in the frame of B."""

    offsets: Ints
    """(p + 1,): where the pairing of each match begins."""

    pairing: Ints
    """(s,): for each site of P A the site of Q B."""


def witnesses(prepared: Prepared, found: Verified, window: Window) -> Witnesses:
    """Orthogonal parts and pairings of matches (rows without one are refused with ValueError).

    Raises NumericsError where a recorded match cannot be found again, which would be a bug of the matcher.
    """
    if (found.grade >= NO_MATCH).any():
        raise ValueError("only matches have a witness")
    cells = prepared.crystals.cells
    sites = np.diff(prepared.batch.offsets)
    index_p = np.abs(np.rint(np.linalg.det(found.p_matrix))).astype(np.int64)
    offsets = np.concatenate([[0], np.cumsum(sites[found.pairs[:, 0]] * index_p)]).astype(np.int64)
    first = found.p_matrix @ cells[found.pairs[:, 0]]
    second = found.q_matrix @ cells[found.pairs[:, 1]]
    u, _, v = np.linalg.svd(np.linalg.solve(first, second))
    turned = prepared.rank[found.pairs[:, 0]] > prepared.rank[found.pairs[:, 1]]
    t = turned[:, None, None]
    pairing, ok = recorded_pairings(
        prepared.crystals,
        prepared.order,
        np.where(turned[:, None], found.pairs[:, ::-1], found.pairs),
        np.where(t, found.q_matrix, found.p_matrix),
        np.where(t, found.p_matrix, found.q_matrix),
        np.where(turned[:, None], -found.shift, found.shift),
        found.largest_shift,
        window.shift,
        window.strain,
        offsets,
    )
    if not ok.all():
        raise NumericsError(
            f"the recorded match of pair {found.pairs[~ok][0].tolist()} has no pairing within its shift"
        )
    if turned.any():  # a permutation stands for its inverse where the pair was computed the other way
        owner = np.repeat(np.arange(len(found)), np.diff(offsets))
        inverse = np.empty_like(pairing)
        inverse[offsets[owner] + pairing] = np.arange(len(pairing)) - offsets[owner]
        pairing = np.where(turned[owner], inverse, pairing)
    return Witnesses(u @ v, offsets, pairing)
